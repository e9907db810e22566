"""What `run` shows while the robot runs and sums up at its end; fed with snapshots, from any thread.

A view that fails is given up; the robot goes on.
"""

from __future__ import annotations

import io
import math
import sys
from collections import deque
from types import TracebackType
from typing import Any, Self

from hobnail.cli.screen import Screen, is_live, speaks_unicode, wants_color
from hobnail.cli.view import ASCII, UNICODE, View, duration, one_line, printable
from hobnail.robot import Robot

LOG_LINES = 200  # kept while the screen is drawn over, printed when it is given back


class Summary:
    """Adds up what snapshots tell; the path is reckoned from their velocities."""

    def __init__(self) -> None:
        self.last: dict[str, Any] | None = None
        self.distance_m = 0.0
        self.turned_rad = 0.0
        self.faults: dict[str, int] = {}
        self.route: dict[str, Any] | None = None  # the last one seen: a stop takes it away
        self._speeds = (0.0, 0.0)

    def add(self, snapshot: dict[str, Any]) -> None:
        """One more snapshot, later than the one before."""
        velocity = snapshot["velocity"]
        speed, rate = math.hypot(velocity["vx_m_s"], velocity["vy_m_s"]), abs(velocity["yaw_rate_rad_s"])
        if self.last is not None:
            time_s = snapshot["now_s"] - self.last["now_s"]
            self.distance_m += 0.5 * (speed + self._speeds[0]) * time_s
            self.turned_rad += 0.5 * (rate + self._speeds[1]) * time_s
        self._speeds = (speed, rate)
        for fault in snapshot["faults"]:
            self.faults[fault["name"]] = max(fault["count"], self.faults.get(fault["name"], 0))
        self.route = snapshot.get("route") or self.route
        self.last = snapshot

    def as_json(self) -> dict[str, object]:
        """The sums, and the last snapshot's timing, counters, stop and route."""
        last = self.last or {}
        return {
            "robot": last.get("robot"),
            "state": last.get("state"),
            "time_s": last.get("uptime_s", 0.0),
            "distance_m": round(self.distance_m, 4),
            "turned_rad": round(self.turned_rad, 4),
            "timing": last.get("timing"),
            "counters": last.get("counters"),
            "faults": self.faults,
            "stop": last.get("stop"),
            "route": self.route,
        }

    def lines(self) -> list[str]:
        """The same for people; needs at least one snapshot."""
        last = self.last
        assert last is not None
        timing, counters, late = last["timing"], last["counters"], last["timing"]["lateness_us"]
        turned = f"{math.degrees(self.turned_rad):.0f} deg of turning"
        lines = [
            f"{last['robot']}: {last['state']} after {duration(last['uptime_s'])}",
            f"  walked    about {self.distance_m:.2f} m and {turned}",
            f"  ticks     {timing['ticks']} of {timing['period_s'] * 1000:g} ms, {timing['skipped']} skipped",
            f"  lateness  p50 {late['p50']:.0f}, p99 {late['p99']:.0f}, p99.9 {late['p999']:.0f}, "
            f"max {late['max']:.0f} us",
            f"  joints    {counters['clamped']} clamped, {counters['out_of_reach']} out of reach, "
            f"{counters['slowed']} ticks slowed for their speed",
        ]
        faults = ", ".join(name if count == 1 else f"{name} x{count}" for name, count in self.faults.items())
        lines.append(f"  faults    {faults or 'none'}")
        route = self.route
        if route:
            done = (
                f"all {route['steps']} steps" if not route["failure"] and route["done"] else route["failure"]
            )
            lines.append(f"  route     {done or 'ended in step {step} of {steps}'.format(**route)}")
        if last["stop"]["latched"]:
            lines.append(f"  stopped   {last['stop']['reason']}")
        return [printable(line) for line in lines]


class Display:
    """The live view on a terminal, else a line for each step of a route; `summary` adds up either way."""

    def __init__(self, robot: Robot, *, plain: bool = False, color: bool = True) -> None:
        envelope = robot.envelope
        self.summary = Summary()
        self.trouble = ""
        self._screen = Screen() if is_live() and not plain else None
        self._view = View(
            [leg.name for leg in robot.legs],
            (envelope.forward_m_s, envelope.sideways_m_s, envelope.turn_rad_s),
            glyphs=UNICODE if speaks_unicode() else ASCII,
            color=wants_color(refused=not color),
        )
        self._told = 0  # the step of a route
        self._stderr = sys.stderr
        self._tail: _Tail | None = None

    def note(self, snapshot: dict[str, Any]) -> None:
        """Add up, show nothing."""
        self.summary.add(snapshot)

    def show(self, snapshot: dict[str, Any]) -> None:
        """Add up, and draw or print."""
        self.note(snapshot)
        if self.trouble:
            return
        try:
            if self._screen is not None:
                self._screen.show(self._view.draw(snapshot, *self._screen.size))
            else:
                self._print(snapshot)
        except Exception as error:  # noqa: BLE001  a closed pipe or a bug here must not hurt the robot
            self.trouble = f"{type(error).__name__}: {error}"

    def __enter__(self) -> Self:
        if self._screen is not None:
            self._screen.__enter__()
            if self._stderr.isatty():
                # Log lines would be drawn over; they are printed when the screen is given back.
                self._tail = _Tail()
                sys.stderr = self._tail
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._screen is not None:
            self._screen.__exit__(kind, error, trace)
            if self._tail is not None:
                sys.stderr = self._stderr
                print(self._tail.text(), end="", file=sys.stderr)

    def _print(self, snapshot: dict[str, Any]) -> None:
        # States and faults are in the log already; a second line for each would only fill a journal.
        route = snapshot.get("route")
        if route and not route["done"] and route["step"] != self._told:
            self._told = route["step"]
            print(one_line(snapshot), flush=True)


class _Tail(io.TextIOBase):
    """Stands in for stderr and keeps the last pieces written."""

    def __init__(self) -> None:
        self._kept: deque[str] = deque(maxlen=2 * LOG_LINES)  # print writes each line end by itself

    def write(self, text: str) -> int:
        self._kept.append(text)
        return len(text)

    def text(self) -> str:
        return "".join(self._kept)
