"""What a snapshot of the running robot looks like in a terminal: pure text, no I/O.

`View.draw` gives a screenful of lines for `watch` and `run`, `one_line` a
single line for logs and pipes.  Speeds are shown in m/s and degrees a second,
lengths in mm or m.  Colours are ANSI and come only when asked for.
"""

from __future__ import annotations

import math
import textwrap
from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

Snapshot = Mapping[str, Any]

STYLES = {
    "": "",
    "bold": "\x1b[1m",
    "dim": "\x1b[2m",
    "good": "\x1b[1;30;42m",
    "busy": "\x1b[1;30;46m",
    "calm": "\x1b[1;7m",
    "bad": "\x1b[1;37;41m",
    "warn": "\x1b[1;33m",
    "alarm": "\x1b[1;31m",
    "bar": "\x1b[36m",
}
PLAIN = "\x1b[0m"

STATE_STYLE = {
    "off": "calm",
    "resting": "calm",
    "standing": "good",
    "walking": "good",
    "stopping": "bad",
    "stopped": "bad",
}  # everything else is on its way: busy

FEW_COLUMNS = 40
OWN_ERRAND = 0  # the client number of the service itself


@dataclass(frozen=True, slots=True)
class Glyphs:
    """Characters that diagrams are drawn with."""

    full: str
    empty: str
    mark: str
    down: str
    up: str


UNICODE = Glyphs(full="█", empty="·", mark="┃", down="█", up="▁")
ASCII = Glyphs(full="#", empty=".", mark="|", down="#", up="_")


@dataclass(slots=True)
class Line:
    """One line of styled pieces; cut to a width only when it is written out."""

    pieces: list[tuple[str, str]] = field(default_factory=list)

    def add(self, text: str, style: str = "") -> Line:
        """Append a piece, with what could steer a terminal made harmless; returns the line itself."""
        self.pieces.append((printable(text), style))
        return self

    @property
    def width(self) -> int:
        """Columns used."""
        return sum(len(text) for text, _ in self.pieces)

    def text(self, width: int, *, color: bool) -> str:
        """The line, at most `width` columns wide."""
        out, left = [], width
        for text, style in self.pieces:
            part = text[:left]
            left -= len(part)
            out.append(f"{STYLES[style]}{part}{PLAIN}" if color and style and part else part)
        return "".join(out).rstrip() if not color else "".join(out)


class View:
    """Draws snapshots of one robot; remembers only the last footfalls, for the gait diagram."""

    def __init__(
        self,
        legs: Sequence[str] = (),
        limits: tuple[float, float, float] | None = None,
        *,
        glyphs: Glyphs = UNICODE,
        color: bool = True,
    ) -> None:
        """`legs` are the legs' names; `limits` the greatest vx, vy (m/s) and yaw rate (rad/s)
        that the bars can show; both are guessed when not given."""
        self.legs = tuple(legs)
        self.limits = limits or (0.3, 0.15, 1.0)
        self.glyphs = glyphs
        self.color = color
        self._stances: deque[tuple[bool, ...]] = deque(maxlen=200)

    def draw(self, snapshot: Snapshot, width: int = 80, height: int = 24) -> list[str]:
        """At most `height` lines of at most `width` columns.

        When they do not fit, the least important blocks go first; state, faults
        and speeds stay longest.
        """
        width = max(width, FEW_COLUMNS)
        self._stances.append(tuple(snapshot["stance"]))
        blocks: list[tuple[int, list[Line]]] = [  # (rank: the higher, the sooner dropped; lines)
            (0, self._header(snapshot, width)),
            (0, _faults(snapshot, width)),
            (1, _route(snapshot, width, self.glyphs)),
            (1, self._speeds(snapshot, width)),
            (3, self._footfalls(width)),
            (2, _place(snapshot)),
            (4, _timing(snapshot)),
        ]
        while sum(len(block) + 1 for _, block in blocks if block) - 1 > height:
            least = max(blocks, key=lambda ranked: ranked[0])
            if least[0] == 0:
                break
            blocks.remove(least)
        lines: list[Line] = []
        for _, block in blocks:
            if block:
                lines += [Line(), *block] if lines else block
        return [line.text(width, color=self.color) for line in lines[:height]]

    def _header(self, snapshot: Snapshot, width: int) -> list[Line]:
        state = str(snapshot["state"])
        badge = f"   {state.upper()}   "
        style = STATE_STYLE.get(state, "busy")
        robot, gait = snapshot["robot"], snapshot["gait"]
        driver, command = snapshot["driver"], snapshot["command"]
        middle = f"  for {duration(snapshot['now_s'] - snapshot['since_s'])}, gait {gait}"
        holder = command.get("holder")
        if holder is None:
            claim = "nobody commands"
        elif holder == OWN_ERRAND:
            claim = "walks its own route"
        else:
            ago = f", {command['age_s']:.1f} s ago" if command.get("age_s") is not None else ""
            claim = f"commanded by client {holder}{ago}"
        stop = snapshot["stop"]
        if stop["latched"]:
            claim = f"stop latched (category {stop['category']}): {stop['reason'] or 'no reason given'}"
        supply = snapshot.get("supply_v")
        about = f"{driver['name']}" + (" (no hardware)" if driver.get("simulated") else "")
        volts = f", {supply:.1f} V" if supply is not None else ""
        right = f"up {duration(snapshot['uptime_s'])}"
        top = Line().add(" " * len(badge), style).add(f"  {robot}", "bold")
        top.add(right.rjust(max(1, width - top.width)), "dim")
        bottom = Line().add(" " * len(badge), style).add(f"  {about}{volts}", "dim")
        centre = Line().add(badge, style).add(middle)
        style = "alarm" if stop["latched"] else "dim"
        if len(claim) + bottom.width + 2 <= width:
            return [top, centre, bottom.add(f"; {claim}", style)]
        return [top, centre, bottom, *(Line().add(text, style) for text in textwrap.wrap(claim, width)[:2])]

    def _speeds(self, snapshot: Snapshot, width: int) -> list[Line]:
        route, command, real = snapshot.get("route"), snapshot["command"], snapshot["velocity"]
        if route and not route["done"]:
            command = route["twist"]  # a route commands by itself
        slowdown = float(snapshot["slowdown"])
        span = max(10, min(41, width - 39))
        head = Line().add(f"{'':<9}{'command':>10}{'real':>10}         ", "dim")
        head.add(f"{self.glyphs.full} real, {self.glyphs.mark} command"[: max(0, span)], "dim")
        lines = [head]
        for name, key, scale, unit, limit in (
            ("forward", "vx_m_s", 1.0, "m/s", self.limits[0]),
            ("left", "vy_m_s", 1.0, "m/s", self.limits[1]),
            ("turn left", "yaw_rate_rad_s", math.degrees(1.0), "deg/s", self.limits[2]),
        ):
            digits = 3 if unit == "m/s" else 1
            wanted, is_now = float(command[key] or 0.0), float(real[key])
            line = Line().add(f"{name:<9}")
            line.add(f"{wanted * scale:>+10.{digits}f}").add(f"{is_now * scale:>+10.{digits}f}", "bold")
            line.add(f" {unit:<6} ").add(bar(is_now / limit, wanted / limit, span, self.glyphs), "bar")
            lines.append(line)
        if slowdown < 0.995:
            lines.append(Line().add(f"slowed to {slowdown:.0%}: a joint is at its speed limit", "warn"))
        return lines

    def _footfalls(self, width: int) -> list[Line]:
        count = len(self._stances[-1])
        if not count:  # no pulses: nothing is known of the feet
            return []
        names = self.legs if len(self.legs) == count else [f"leg {i + 1}" for i in range(count)]
        wide = max((len(name) for name in names), default=0)
        shown = list(self._stances)[-max(8, min(60, width - wide - 9)) :]
        lines = []
        for leg, name in enumerate(names):
            line = Line().add(f"{name:<{wide}} ").add("down " if shown[-1][leg] else "lift ", "dim")
            steps = [s[leg] if leg < len(s) else True for s in shown]
            if len(steps) > 1:
                line.add("".join(self.glyphs.down if down else self.glyphs.up for down in steps), "bar")
            lines.append(line)
        return lines


def outline(description: Mapping[str, Any]) -> tuple[tuple[str, ...], tuple[float, float, float]]:
    """What a `View` needs of the answer to `describe`: the legs' names, the greatest speeds."""
    envelope = description["envelope"]
    limits = (envelope["forward_m_s"], envelope["sideways_m_s"], envelope["turn_rad_s"])
    return tuple(description["legs"]), limits


def one_line(snapshot: Snapshot) -> str:
    """The robot in one line, for a pipe or a log."""
    pose, real = snapshot["pose"], snapshot["velocity"]
    turn, heading = math.degrees(real["yaw_rate_rad_s"]), math.degrees(pose["yaw_rad"])
    parts = [
        f"{duration(snapshot['uptime_s'])} {snapshot['state']}",
        f"gait {snapshot['gait']}",
        f"v {real['vx_m_s']:+.3f} {real['vy_m_s']:+.3f} m/s {turn:+.1f} deg/s",
        f"at {pose['x_m']:+.3f} {pose['y_m']:+.3f} m {heading:+.1f} deg",
    ]
    route = snapshot.get("route")
    if route and not route["done"]:
        parts.append(
            f"route {route['step']}/{route['steps']} {route['done_share']:.0%} {route['description']}"
        )
    if snapshot["faults"]:
        parts.append("FAULTS " + ", ".join(f"{f['name']} ({f['severity']})" for f in snapshot["faults"]))
    if snapshot["stop"]["latched"]:
        parts.append("STOP LATCHED")
    return printable("  ".join(parts))


def printable(text: str) -> str:
    """The text with control characters replaced: names, notes and reasons come from others."""
    return text if text.isprintable() else "".join(c if c.isprintable() else "?" for c in text)


def bar(value: float, wanted: float, span: int, glyphs: Glyphs) -> str:
    """A bar from the middle, -1 at the left end and 1 at the right; `wanted` is a mark on it."""
    half = span // 2
    cells = [glyphs.empty] * (2 * half + 1)
    reach = round(max(-1.0, min(1.0, value)) * half)
    for k in range(min(0, reach), max(0, reach) + 1):
        if reach:
            cells[half + k] = glyphs.full
    cells[half + round(max(-1.0, min(1.0, wanted)) * half)] = glyphs.mark
    return "".join(cells)


def gauge(share: float, span: int, glyphs: Glyphs) -> str:
    """A bar that fills from the left as `share` goes from 0 to 1."""
    full = round(max(0.0, min(1.0, share)) * span)
    return glyphs.full * full + glyphs.empty * (span - full)


def duration(seconds: float) -> str:
    """`4.2 s`, `3:07 min` or `2:03:07 h`."""
    if seconds < 60:
        return f"{seconds:.1f} s"
    minutes, rest = divmod(int(seconds), 60)
    if minutes < 60:
        return f"{minutes}:{rest:02d} min"
    return f"{minutes // 60}:{minutes % 60:02d}:{rest:02d} h"


def _faults(snapshot: Snapshot, width: int) -> list[Line]:
    lines: list[Line] = []
    first = str(snapshot.get("first_cause") or "")
    for fault in snapshot["faults"]:
        name, severity = fault["name"], fault["severity"]
        times = f" x{fault['count']}" if fault["count"] > 1 else ""
        mark = ", first cause" if name in first and len(snapshot["faults"]) > 1 else ""
        text = f"{severity.upper()} {name}{times}{mark}: {fault['message']}"
        style = "warn" if severity == "warn" else "alarm"
        lines += [Line().add(part, style) for part in textwrap.wrap(text, width)[:2]]
        lines += [
            Line().add(f"  {part}", "bold") for part in textwrap.wrap(f"next: {fault['next']}", width - 2)[:2]
        ]
    return lines or [Line().add("no faults", "dim")]


def _route(snapshot: Snapshot, width: int, glyphs: Glyphs) -> list[Line]:
    route = snapshot.get("route")
    if not route or (route["done"] and not route["failure"]):
        return []
    share = float(route["done_share"])
    line = Line().add(f"route step {route['step']} of {route['steps']}  ", "bold")
    line.add(gauge(share, max(10, min(30, width - 50)), glyphs), "bar").add(f" {share:4.0%}")
    line.add(f"  {duration(route['remaining_s'])} left", "dim")
    if route["failure"]:
        return [line, *(Line().add(text, "alarm") for text in textwrap.wrap(route["failure"], width)[:3])]
    return [line, Line().add(f"  {route['description']}")]


def _place(snapshot: Snapshot) -> list[Line]:
    pose = snapshot["pose"]
    heading = math.degrees(pose["yaw_rad"])
    height_m = snapshot["height_m"]
    line = Line().add("odometry  ", "dim").add(f"x {pose['x_m']:+.3f} m  y {pose['y_m']:+.3f} m")
    line.add(f"  heading {heading:+.1f} deg")
    return [line.add(f"  height {height_m * 1000:.0f} mm") if height_m is not None else line]


def _timing(snapshot: Snapshot) -> list[Line]:
    timing, counters = snapshot["timing"], snapshot["counters"]
    late = timing["lateness_us"]
    ticks = f"{timing['period_s'] * 1000:g} ms tick, {timing['ticks']} done, {timing['skipped']} skipped; "
    ticks += (
        f"{counters['clamped']} clamped, {counters['out_of_reach']} out of reach, {counters['slowed']} slowed"
    )
    names = (("p50", "p50"), ("p99", "p99"), ("p99.9", "p999"), ("max", "max"))
    lateness = "late by us: " + ", ".join(f"{name} {late[key]:.0f}" for name, key in names)
    return [Line().add(ticks, "dim"), Line().add(lateness, "dim")]
