"""Reports of rehearsals: one self-contained HTML file with a table and plots; JSON; a text table.

Figures are in the units that people read (mm, degrees); JSON is in SI units.
Plots are inline SVG: the file needs nothing beside it.
"""

from __future__ import annotations

import html
import io
import math
from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

import numpy as np

from hobnail.errors import DriverUnavailableError
from hobnail.workshop.rehearse.measures import Result, headings_rad
from hobnail.workshop.rehearse.runner import Recording

_STYLE = """
body { font: 15px/1.45 system-ui, sans-serif; color: #222;
  margin: 2rem auto; max-width: 70rem; padding: 0 1rem; }
table { border-collapse: collapse; margin: 1rem 0; font-variant-numeric: tabular-nums; }
th, td { padding: .25rem .7rem; text-align: right; border-bottom: 1px solid #ddd; }
th:first-child, td:first-child { text-align: left; }
.ok { color: #17722b; } .bad { color: #b3261e; }
figure { margin: 1rem 0 2rem; } svg { max-width: 100%; height: auto; }
ul { margin: .3rem 0 1rem; }
"""


def as_json(result: Result) -> dict[str, Any]:
    """Everything measured, SI units, and the verdict; JSON-able."""
    told = asdict(result)
    failures = result.failures()
    return {
        "scenario": result.scenario,
        "passed": not failures,
        "failures": failures,
        **{name: value for name, value in told.items() if name not in ("scenario", "limits")},
        "limits": asdict(result.limits),
        "speed_error": result.speed_error,
        "turn_error": result.turn_error,
        "drift_rad_m": result.drift_rad_m,
    }


HEADINGS = (
    "scenario",
    "verdict",
    "speed err mm/s",
    "turn err deg/s",
    "drift deg/m",
    "tilt95 deg",
    "peak deg",
    "slip mm/m",
    "scuffs",
    "load %",
    "J/m",
    "jolt m/s2",
)


def row(result: Result) -> tuple[str, ...]:
    """One line of the table, in the order of `HEADINGS`."""
    stretches = result.stretches
    speed = max((s.speed_error_m_s for s in stretches), default=math.nan)
    turn = max((s.turn_error_rad_s for s in stretches), key=abs, default=math.nan)
    return (
        result.scenario,
        "FELL" if result.fell else "ok" if not result.failures() else "missed",
        _figure(1000 * speed, 1),
        _figure(math.degrees(turn), 2, sign=True),
        _figure(math.degrees(result.drift_rad_m), 2) if stretches else "-",
        _figure(math.degrees(result.tilt_95_rad), 2),
        _figure(math.degrees(result.tilt_peak_rad), 2),
        _figure(1000 * result.slip_m_m, 0) if result.way_m > 0.1 else "-",
        f"{result.scuffs}/{result.swings}",
        _figure(100 * result.peak_load, 0),
        _figure(result.energy_j_m, 0),
        _figure(result.jolt_m_s2, 1),
    )


def table(results: Sequence[Result]) -> list[str]:
    """The results as lines of text, and under them what failed."""
    rows = [HEADINGS, *(row(result) for result in results)]
    widths = [max(len(cells[column]) for cells in rows) for column in range(len(HEADINGS))]
    lines = []
    for cells in rows:
        first = [cells[0].ljust(widths[0]), cells[1].ljust(widths[1])]
        lines.append("  ".join(first + [c.rjust(w) for c, w in zip(cells[2:], widths[2:], strict=True)]))
    for result in results:
        lines += [f"{result.scenario}: {failure}" for failure in result.failures()]
    return lines


def page(robot: str, runs: Sequence[tuple[Recording, Result]]) -> str:
    """The HTML report of several rehearsals of one robot.

    Raises DriverUnavailableError when matplotlib is not installed.
    """
    failed = sum(bool(result.failures()) for _, result in runs)
    verdict = "all passed" if not failed else f"{failed} of {len(runs)} did not pass"
    parts = [
        f"<!doctype html><html lang='en'><head><meta charset='utf-8'><title>{html.escape(robot)} rehearsed"
        f"</title><style>{_STYLE}</style></head><body>",
        f"<h1>{html.escape(robot)} rehearsed: {verdict}</h1>",
        "<table><tr>" + "".join(f"<th>{html.escape(name)}</th>" for name in HEADINGS) + "</tr>",
    ]
    for _, result in runs:
        cells = row(result)
        mark = "ok" if not result.failures() else "bad"
        parts.append(
            f"<tr><td><a href='#{html.escape(cells[0])}'>{html.escape(cells[0])}</a></td>"
            f"<td class='{mark}'>{cells[1]}</td>"
            + "".join(f"<td>{html.escape(cell)}</td>" for cell in cells[2:])
            + "</tr>"
        )
    parts.append("</table>")
    for recording, result in runs:
        scenario = recording.scenario
        parts.append(f"<h2 id='{html.escape(scenario.name)}'>{html.escape(scenario.name)}</h2>")
        parts.append(f"<p>{html.escape(scenario.about)}</p>")
        disturbed = recording.disturbances.described()
        if disturbed:
            parts.append(
                f"<p>Injected: {html.escape(', '.join(f'{k} = {v}' for k, v in disturbed.items()))}</p>"
            )
        failures = result.failures()
        if failures:
            parts.append(
                "<ul class='bad'>" + "".join(f"<li>{html.escape(f)}</li>" for f in failures) + "</ul>"
            )
        parts.append(f"<figure>{plots(recording)}</figure>")
    return "\n".join([*parts, "</body></html>", ""])


def plots(recording: Recording) -> str:
    """Speed, turn rate, tilt, path, foot forces and load of one rehearsal, as SVG text."""
    figure = figure_class()(figsize=(11, 7.5), layout="constrained")
    axes = figure.subplots(3, 2)
    r = recording
    t = r.time_s
    heading = headings_rad(r)
    c, s = np.cos(heading), np.sin(heading)
    v = r.true_velocity_m_s
    ahead, left = c * v[:, 0] + s * v[:, 1], c * v[:, 1] - s * v[:, 0]
    turn = np.gradient(heading, t)

    speed, rate = axes[0]
    for values, commanded, name, colour in ((ahead, 0, "ahead", "C0"), (left, 1, "left", "C1")):
        speed.plot(t, values, colour, lw=0.8, label=name)
        speed.plot(t, r.command[:, commanded], colour, ls="--", lw=1)
    _dress(speed, "speed, m/s (dashed: asked for)", legend=True)
    rate.plot(t, turn, lw=0.8)
    rate.plot(t, r.command[:, 2], "k--", lw=1)
    _dress(rate, "turn rate, rad/s (dashed: asked for)")

    tilt, path = axes[1]
    rotation = r.true_rotation
    tilt.plot(t, np.degrees(np.arctan2(rotation[:, 2, 1], rotation[:, 2, 2])), lw=0.8, label="roll")
    tilt.plot(t, np.degrees(-np.arcsin(np.clip(rotation[:, 2, 0], -1, 1))), lw=0.8, label="pitch")
    _dress(tilt, "tilt, degrees", legend=True)
    x, y = r.true_position_m[:, 0], r.true_position_m[:, 1]
    path.plot(x, y, lw=1, label="true")
    ox, oy = _odometry_path(r, heading[0])
    path.plot(ox, oy, "k--", lw=1, label="odometry")
    path.set_aspect("equal", adjustable="datalim")
    _dress(path, "path from above, m", legend=True, x="x, m")

    force, load = axes[2]
    for leg, name in enumerate(leg.name for leg in r.robot.legs):
        force.plot(t, r.foot_force_n[:, leg], lw=0.7, label=name)
    _dress(force, "foot forces, N", legend=True)
    stall = np.array([joint.servo.torque_nm for joint in r.robot.joints])
    load.plot(
        t, 100 * np.max(r.peak_torque_nm / stall, axis=1), lw=0.7, label="most loaded servo, % of stall"
    )
    load.plot(t, r.power_w, lw=0.7, label="electric power of all servos, W")
    _dress(load, "load", legend=True)

    text = io.StringIO()
    figure.savefig(text, format="svg")
    svg = text.getvalue()
    return svg[svg.index("<svg") :]


def figure_class() -> Any:
    """matplotlib's Figure.  Raises DriverUnavailableError when it is not installed."""
    try:
        from matplotlib.figure import Figure
    except ImportError as error:
        raise DriverUnavailableError("reports and films need: pip install 'hobnail[reports]'") from error
    return Figure


def _odometry_path(r: Recording, heading: float) -> tuple[Any, Any]:
    """The odometry's path, laid where and as the robot started."""
    turn = heading - r.pose[0, 2]
    c, s = math.cos(turn), math.sin(turn)
    dx, dy = r.pose[:, 0] - r.pose[0, 0], r.pose[:, 1] - r.pose[0, 1]
    start = r.true_position_m[0]
    return start[0] + c * dx - s * dy, start[1] + s * dx + c * dy


def _dress(axes: Any, title: str, *, legend: bool = False, x: str = "time, s") -> None:
    axes.set_title(title, fontsize=9, loc="left")
    axes.set_xlabel(x, fontsize=8)
    axes.tick_params(labelsize=8)
    axes.grid(alpha=0.3)
    if legend:
        axes.legend(fontsize=7, loc="upper right")


def _figure(value: float | None, digits: int, *, sign: bool = False) -> str:
    if value is None or math.isnan(value):
        return "-"
    return f"{value:+.{digits}f}" if sign else f"{value:.{digits}f}"
