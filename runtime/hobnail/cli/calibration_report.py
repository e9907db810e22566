"""What a calibration holds, for people and programs: values, when and by whom, what was never measured."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from textwrap import fill

from hobnail.cli.view import printable
from hobnail.config.calibration import WALK
from hobnail.workshop.calibrate.ledger import Entry, Ledger

KEYS = ("direction", "trim_deg", "pulse_map_deg_us", "pulse_limits_us")
SHORT = {"direction": "direction", "trim_deg": "trim", "pulse_map_deg_us": "map", "pulse_limits_us": "limits"}
SHOWN_CHANGES = 10


def as_json(ledger: Ledger) -> dict[str, object]:
    """Everything, in the units of the file."""
    entries = ledger.entries()
    parts = [joint.name for joint in ledger.configured.joints]
    return {
        "robot": ledger.configured.name,
        "file": str(ledger.path),
        "measured": [{**asdict(entry), "stale": entry.is_stale} for entry in entries],
        "never_calibrated": never(parts, entries),
        "history": [asdict(change) for change in ledger.calibration.history],
    }


def never(names: Sequence[str], entries: Sequence[Entry]) -> list[str]:
    """The joints of which nothing was measured."""
    measured = {entry.part for entry in entries}
    return [name for name in names if name not in measured]


def lines(ledger: Ledger) -> list[str]:
    """The same for people, the newest changes only."""
    entries, history = ledger.entries(), ledger.calibration.history
    robot = ledger.configured
    told = [f"{robot.name}: {ledger.path}" + ("" if ledger.path.exists() else ", which is not there yet")]
    if entries:
        width = max(len(entry.part) for entry in entries)
        told += ["", "measured:"]
        told += [
            printable(f"  {entry.part:<{width}}  {entry.key:<19} {entry.value:<14}  {dated(entry)}")
            for entry in entries
        ]
    left = never([joint.name for joint in robot.joints], entries)
    if left:
        names = ", ".join(left) if len(left) < len(robot.joints) else "any joint"
        told += ["", *fill(f"never calibrated: {names}", width=100, subsequent_indent="  ").split("\n")]
    boards = never([board.name for board in robot.boards], entries)
    if boards:
        told += [f"never measured: the clock of board {', '.join(boards)}"]
    if WALK not in {entry.part for entry in entries}:
        told += ["never measured: a walk (`hobnail trim`)"]
    if history:
        told += ["", "history:"]
        if len(history) > SHOWN_CHANGES:
            told += [f"  ({len(history) - SHOWN_CHANGES} older changes: --json)"]
        told += [
            printable(f"  {change.when}  {change.what}: {change.old} -> {change.new}, by {change.who}")
            for change in history[-SHOWN_CHANGES:]
        ]
    return told


def dated(entry: Entry) -> str:
    """When a value was measured and by whom."""
    if entry.days is None:
        return "by hand, no record" if not entry.when else f"{entry.when}, {entry.who}"
    age = "today" if entry.days == 0 else f"{entry.days} day{'s' if entry.days > 1 else ''} ago"
    return f"{entry.when[:10]}, {age}, {entry.who}" + (": old, measure again" if entry.is_stale else "")


def notes(ledger: Ledger) -> dict[str, str]:
    """What to tell before each joint: what is known of it, and what was never measured."""
    by_part: dict[str, dict[str, Entry]] = {}
    for entry in ledger.entries():
        by_part.setdefault(entry.part, {})[entry.key] = entry
    told = {}
    for joint in ledger.configured.joints:
        known = by_part.get(joint.name, {})
        rows = [f"\n  {SHORT[key]} {known[key].value} ({dated(known[key])})" for key in KEYS if key in known]
        missing = [SHORT[key] for key in KEYS if key not in known]
        if missing:
            rows.append(f"\n  never measured: {', '.join(missing)}")
        told[joint.name] = "".join(rows)
    return told
