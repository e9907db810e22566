"""Lines and rows put together, one life of the service each, on its own clock; s.

Ticks and lines carry the monotonic time of the machine, which no clock setting
changes; what the wall clock showed then is worked out from the lines nearby.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

from hobnail.service.recorder import Ring, Row
from hobnail.workshop.log.reading import Event, Material

LATEST_S = 253_402_300_799.0  # the end of the year 9999
CLOCK_STEP_S = 1.0  # a wall clock that moves so much against the monotonic one was set


@dataclass(slots=True)
class Run:
    """One life of the service: its lines, its ticks, both by time; `header` of its ring, if there is one."""

    name: str
    events: list[Event] = field(default_factory=list)
    rows: list[Row] = field(default_factory=list)
    header: dict[str, Any] = field(default_factory=dict)

    @property
    def robot(self) -> str:
        """The robot's name; empty when not known."""
        told = (str(event.details["robot"]) for event in self.events if "robot" in event.details)
        return str(self.header.get("robot", "")) or next(told, "")

    @property
    def span_s(self) -> tuple[float, float]:
        """Monotonic time of the first and of the last thing known."""
        times = [event.monotonic_s for event in self.events] + [row.time_s for row in self.rows]
        return min(times), max(times)

    @property
    def has_ended(self) -> bool:
        """It ended in good order."""
        return any(event.kind == "end" for event in self.events)

    def wall_s(self, monotonic_s: float) -> float:
        """What the wall clock showed then, so far as is known."""
        index = bisect_right(self.events, monotonic_s, key=lambda event: event.monotonic_s)
        if self.events:
            near = self.events[max(0, index - 1)]
            return monotonic_s + near.wall_s - near.monotonic_s
        return monotonic_s + float(self.header["wall_offset_s"])

    def clock_steps(self) -> list[tuple[float, float]]:
        """When the wall clock was set, and by how much."""
        steps = []
        for before, after in zip(self.events, self.events[1:], strict=False):
            moved_s = (after.wall_s - after.monotonic_s) - (before.wall_s - before.monotonic_s)
            if abs(moved_s) > CLOCK_STEP_S:
                steps.append((after.monotonic_s, moved_s))
        return steps


def moment(wall_s: float) -> datetime:
    """That time in UTC; the nearest that a date can say, whatever a damaged file has."""
    return datetime.fromtimestamp(min(max(wall_s, 0.0), LATEST_S), UTC)


def put_together(material: Material) -> list[Run]:
    """Every run that something is known of, oldest first.

    The log is appended to, so that its order holds even where the wall clock
    was wrong for a while; rings that no line goes with are put in by their time.
    """
    runs: dict[str, Run] = {}
    for event in material.events:
        runs.setdefault(event.run, Run(event.run)).events.append(event)
    ordered = list(runs.values())
    for run in ordered:
        run.events.sort(key=lambda event: event.monotonic_s)
    for _, ring in material.rings:
        name = ring.header["run"] or f"ring of {ring.header['wall_offset_s']:.3f}"
        if name not in runs:
            runs[name] = Run(name)
            runs[name].header = ring.header
            ordered.insert(_place(ring, ordered), runs[name])
        _add_rows(runs[name], ring)
    return [run for run in ordered if run.events or run.rows]


def _place(ring: Ring, runs: list[Run]) -> int:
    if not ring.rows:
        return len(runs)
    began_s = ring.rows[0].time_s + ring.header["wall_offset_s"]
    return next((k for k, run in enumerate(runs) if run.wall_s(run.span_s[0]) > began_s), len(runs))


def _add_rows(run: Run, ring: Ring) -> None:
    run.header = run.header or ring.header
    if ring.header["joints"] != run.header["joints"]:
        return  # of a robot with other joints under the same name: no table holds both
    rows = {row.number: row for row in run.rows}
    # A checksum keeps no nonsense out that was written with it.
    rows |= {
        row.number: row for row in ring.rows if math.isfinite(row.time_s + row.lateness_us + row.slowdown)
    }
    run.rows = sorted(rows.values(), key=lambda row: row.number)
