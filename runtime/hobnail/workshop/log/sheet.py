"""The ticks as a table for a spreadsheet: comma-separated (RFC 4180), a row a tick, units in the heads."""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Sequence
from typing import TextIO

from hobnail.service.recorder import Row
from hobnail.workshop.log.runs import Run, moment

HEADS = (
    "time_utc",
    "monotonic_s",
    "run",
    "number",
    "state",
    "faults",
    "dt_s",
    "lateness_us",
    *(f"{what}_{axis}" for what in ("asked", "done") for axis in ("vx_m_s", "vy_m_s", "yaw_rate_rad_s")),
    *("x_m", "y_m", "yaw_rad", "slowdown", "supply_v"),
)
NO_SIGNAL = ""  # an empty cell: a joint that gets no pulse


def write(out: TextIO, runs: Sequence[Run], first_s: float = -math.inf) -> tuple[int, int]:
    """Write the ticks from a wall-clock time on; how many were written, and how many left out
    because their robot has other joints than the newest."""
    joints: list[str] = next((run.header["joints"] for run in reversed(runs) if run.rows), [])
    table = csv.writer(out)
    table.writerow(
        [*HEADS, *(f"pulse_us {name}" for name in joints), *(f"angle_rad {name}" for name in joints)]
    )
    written = left_out = 0
    for run in runs:
        for row in run.rows:
            wall_s = run.wall_s(row.time_s)
            if wall_s < first_s:
                continue
            if run.header["joints"] != joints:
                left_out += 1
                continue
            table.writerow(_cells(run, row, wall_s))
            written += 1
    return written, left_out


def _cells(run: Run, row: Row, wall_s: float) -> list[object]:
    stamp = moment(wall_s).isoformat(timespec="milliseconds")
    numbers: Iterable[float] = (
        *(row.dt_s, row.lateness_us),
        *(*row.command, *row.velocity, *row.pose),
        *(row.slowdown, row.supply_v),
        *(*row.pulses_us, *row.joints_rad),
    )
    return [
        *(stamp, f"{row.time_s:.6f}", run.name, row.number, row.state, " ".join(row.faults)),
        *(f"{value:.6g}" if math.isfinite(value) else NO_SIGNAL for value in numbers),
    ]
