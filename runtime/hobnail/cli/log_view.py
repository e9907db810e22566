"""What `hobnail log` prints: pure text; local times, m/s, degrees, us.

The incident first, then the story a line an entry, then the tick before it.
"""

from __future__ import annotations

import math
import textwrap
from typing import TYPE_CHECKING

from hobnail.cli.view import PLAIN, STYLES, duration, printable
from hobnail.workshop.log.incident import tick_at
from hobnail.workshop.log.runs import moment

if TYPE_CHECKING:
    from hobnail.cli.log import Told
    from hobnail.service.recorder import Row
    from hobnail.workshop.log.runs import Run

INDENT = 14  # of what follows a time
LABEL = 11
ENDLESS = 1_000_000  # columns where nothing is to be broken


def lines(told: Told, *, width: int | None, color: bool) -> list[str]:
    """The whole of it; `width` columns, None for lines that are not broken."""
    page = _Page(width or ENDLESS, color)
    _head(page, told)
    _incident(page, told)
    _story(page, told)
    _tick(page, told)
    return page.lines


class _Page:
    def __init__(self, width: int, color: bool) -> None:
        self.lines: list[str] = []
        self._width = max(width, 40)
        self._color = color

    def add(self, text: str, *, first: str = "", indent: int = 0, style: str = "") -> None:
        """A paragraph after `first`; what does not fit goes on below, `indent` columns in."""
        parts = textwrap.wrap(
            printable(text),
            self._width - 1,
            initial_indent=first.ljust(indent),
            subsequent_indent=" " * indent,
            break_on_hyphens=False,
        ) or [first]
        if self._color and style:
            parts = [
                f"{part[:indent]}{STYLES[style]}{part[indent:]}{PLAIN}" if part.strip() else part
                for part in parts
            ]
        self.lines += parts

    def gap(self) -> None:
        """An empty line."""
        self.lines.append("")


def _head(page: _Page, told: Told) -> None:
    robots = ", ".join(dict.fromkeys(run.robot for run in told.runs if run.robot)) or "a robot without a name"
    folders = dict.fromkeys(str(path.parent) for path in told.material.sources)
    page.add(f"{robots}; record in {', '.join(folders)}")
    for note in told.material.notes:
        page.add(note, first="note", indent=LABEL, style="warn")
    if not told.entries:
        page.add("nothing is recorded yet")
        return
    newest = told.entries[-1]
    zone = moment(newest.wall_s).astimezone().strftime("UTC%z")
    page.add(
        f"times are local ({zone}), as the machine's wall clock had them; order and intervals go by its "
        f"monotonic clock, which nobody sets: {_clock(newest.wall_s)} is {newest.monotonic_s:.3f} s on it"
    )


def _incident(page: _Page, told: Told) -> None:
    page.gap()
    happened = told.incident
    if happened is None:
        page.add("no incident is recorded", style="bold")
        return
    cause = happened.cause
    page.add(f"{_day(cause.wall_s)} {_clock(cause.wall_s)}", first="incident", indent=LABEL, style="bold")
    page.add(cause.text, first="cause", indent=LABEL, style="alarm")
    for alarm in happened.alarms[1:4]:
        after = f"{alarm.monotonic_s - cause.monotonic_s:.3f} s later" if alarm.run == cause.run else "then"
        page.add(f"{after}: {alarm.text}", first="then", indent=LABEL)
    if len(happened.alarms) > 4:
        page.add(f"{len(happened.alarms) - 4} more, see below", first="then", indent=LABEL)
    if happened.asked is not None:
        page.add(happened.asked.who, first="by", indent=LABEL)
    if happened.over is not None:
        long = duration(max(0.0, happened.over.wall_s - cause.wall_s))
        page.add(f"after {long}: {happened.over.text}", first="over", indent=LABEL)
    if happened.next:
        page.add(happened.next, first="next", indent=LABEL, style="bold")


def _story(page: _Page, told: Told) -> None:
    page.gap()
    day = ""
    advised: set[str] = set()
    for entry in told.shown:
        if _day(entry.wall_s) != day:
            day = _day(entry.wall_s)
            page.add(f"-- {day} --", style="dim")
        text = f"{entry.who}: {entry.text}" if entry.who else entry.text
        if entry.count > 1:
            text += f" (repeated {entry.count} times"
            text += f", last at {_clock(entry.until_s)})" if math.isfinite(entry.until_s) else ")"
        style = "alarm" if entry.alarm else "warn" if entry.warning else ""
        page.add(text, first=_clock(entry.wall_s), indent=INDENT, style=style)
        if entry.next and entry.name not in advised:
            advised.add(entry.name)
            page.add(f"next: {entry.next}", indent=INDENT, first="", style="dim")
    if not told.shown:
        page.add("nothing is recorded of that time; --all shows all")
    if told.hidden and told.shown:
        page.add(
            f"{told.hidden} lines of other times are not shown: --all, --last SECONDS, --since TIME",
            style="dim",
        )


def _tick(page: _Page, told: Told) -> None:
    if told.incident is None:
        return
    cause = told.incident.cause
    page.gap()
    row = tick_at(told.runs, cause)
    if row is None:
        page.add(
            "of the pulses before the incident nothing is kept (no pulses, or over a minute of them since)"
        )
        return
    run = next(run for run in told.runs if run.name == cause.run)
    ago_s = cause.monotonic_s - row.time_s
    page.add(f"the tick {1000 * ago_s:.0f} ms before, number {row.number}, {row.state}", style="bold")
    page.add(_twist(row.command), first="asked", indent=LABEL)
    slowed = f", slowed to {row.slowdown:.0%}" if row.slowdown < 0.995 else ""
    page.add(f"{_twist(row.velocity)}{slowed}", first="done", indent=LABEL)
    x, y, yaw = row.pose
    page.add(
        f"x {x:+.3f} m, y {y:+.3f} m, heading {math.degrees(yaw):+.1f} deg by odometry",
        first="place",
        indent=LABEL,
    )
    page.add(
        f"supply {row.supply_v:.2f} V, {row.lateness_us / 1000:.2f} ms late, "
        f"faults: {', '.join(row.faults) or 'none'}",
        first="machine",
        indent=LABEL,
    )
    legs = _pulses(run, row)
    indent = max(LABEL, *(len(leg) + 2 for leg in legs))
    for leg, pulses in legs.items():
        page.add(", ".join(pulses), first=leg, indent=indent)


def _twist(twist: tuple[float, float, float]) -> str:
    vx, vy, rate = twist
    return f"{vx:+.3f} m/s ahead, {vy:+.3f} m/s left, {math.degrees(rate):+.1f} deg/s"


def _pulses(run: Run, row: Row) -> dict[str, list[str]]:
    """The pulses handed to the bus, leg by leg, us."""
    legs: dict[str, list[str]] = {}
    for name, pulse in zip(run.header["joints"], row.pulses_us, strict=True):
        leg, _, part = name.rpartition(".")
        width = f"{pulse:.0f} us" if math.isfinite(pulse) else "no pulse"
        legs.setdefault(leg, []).append(f"{part} {width}")
    return legs


def _clock(wall_s: float) -> str:
    return moment(wall_s).astimezone().strftime("%H:%M:%S.%f")[:-3]


def _day(wall_s: float) -> str:
    return moment(wall_s).astimezone().strftime("%Y-%m-%d")
