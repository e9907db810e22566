"""`hobnail log`: tells what the robot was asked for, what it sent and what went wrong, from its record."""

from __future__ import annotations

import contextlib
import math
import shutil
import socket
import sys
from argparse import ArgumentTypeError, Namespace
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from hobnail.cli.options import Parser, add_json, number, print_json

if TYPE_CHECKING:
    from hobnail.service.recorder import Row
    from hobnail.workshop.log.incident import Incident
    from hobnail.workshop.log.reading import Material
    from hobnail.workshop.log.runs import Run
    from hobnail.workshop.log.story import Entry

_NO_DAY = 1900  # what strptime gives for a time alone


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "record",
        metavar="RECORD",
        nargs="*",
        help="files or directories of a record, of another machine too (default: where the service keeps it)",
    )
    parser.add_argument(
        "--socket",
        metavar="PATH",
        help="the socket of the robot whose record to read, where a machine has several",
    )
    span = parser.add_mutually_exclusive_group()
    span.add_argument(
        "--last",
        metavar="SECONDS",
        type=number("--last", "seconds", above=0),
        help="only so many seconds, counted back from the newest line of the record",
    )
    span.add_argument(
        "--since",
        metavar="TIME",
        type=_time,
        help="only from a local time on: 14:30, 14:30:05 (on the record's last day), 2026-03-01T14:30",
    )
    span.add_argument("--all", action="store_true", help="the whole record")
    parser.add_argument(
        "--csv",
        metavar="FILE",
        help="write the ticks as a table for a spreadsheet (- for standard output), and no story: those of "
        "the time chosen, else all that are kept",
    )
    add_json(parser, "print one JSON document: sources, notes, runs, incident, entries, tick")
    parser.example(
        "hobnail log",
        "hobnail log --last 600",
        "hobnail log --csv ticks.csv",
        "hobnail log ~/from-the-robot/ --json | jq .incident",
    )
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Shows the time around the last incident (an emergency stop, a fault that held or stopped the\n"
        "robot, a program that ended without a word), else the last minute. It only reads, also while\n"
        "the robot runs. The last minute of pulses is kept in memory and gone after a reboot, but for\n"
        "the recordings of stops; the log stays.\n"
        "Exit codes: 0 told; 64 wrong usage; 65 a file is no record; 66 no record; 77 no permission."
    )


@dataclass(frozen=True, slots=True)
class Told:
    """A record, read and put in order."""

    material: Material
    runs: list[Run]
    entries: list[Entry]  # all of them, not folded
    shown: list[Entry]  # chosen and folded
    hidden: int  # how many of all were not chosen
    incident: Incident | None
    first_s: float  # wall clock, the earliest that was asked for; -inf: no time was


def run(arguments: Namespace) -> int:
    """Read, and tell."""
    told = _told(arguments)
    if arguments.csv:
        return _write_csv(arguments, told)
    if arguments.json:
        print_json(as_json(told))
    else:
        from hobnail.cli.log_view import lines
        from hobnail.cli.screen import wants_color

        print("\n".join(lines(told, width=_width(), color=wants_color())))
    return 0


def _told(arguments: Namespace) -> Told:
    from hobnail.workshop.log import incident, places, reading, runs, story

    if arguments.record:
        files = places.named(arguments.record)
        material = reading.read(files, strict=any(Path(name).is_file() for name in arguments.record))
        has_ended = False  # of another machine nothing is known but what is in the files
    else:
        files = places.newest(places.of_service(arguments.socket))
        material = reading.read(files, strict=False)
        reading.follow(material)
        name = Path(arguments.socket).name if arguments.socket else "hobnail.sock"
        has_ended = not any(_answers(path.parent / name) for path in files)
    found = runs.put_together(material)
    entries: list[Entry] = []
    for one in found:
        entries += story.entries(one, is_over=has_ended or one is not found[-1])
    happened = incident.last_incident(entries)
    first_s = _first_s(arguments, entries)
    if arguments.last is not None:
        chosen = incident.last(entries, arguments.last)
    elif first_s > -math.inf or arguments.all:
        chosen = [entry for entry in entries if entry.wall_s >= first_s]
    else:
        chosen = incident.around(entries, happened)
    hidden = len(entries) - len(chosen)
    return Told(material, found, entries, story.fold(chosen), hidden, happened, first_s)


def _first_s(arguments: Namespace, entries: Sequence[Entry]) -> float:
    """The wall-clock time that was asked for, at the earliest."""
    newest_s = entries[-1].wall_s if entries else 0.0
    if arguments.last is not None:
        return float(newest_s - arguments.last)
    since: datetime | None = arguments.since
    if since is None:
        return -math.inf
    if since.year == _NO_DAY:
        from hobnail.workshop.log.runs import moment

        day = moment(newest_s).astimezone()
        since = since.replace(year=day.year, month=day.month, day=day.day)
    return since.timestamp()


def _answers(path: Path) -> bool:
    """A service listens there: what it writes now is no end."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as probe:
        probe.setblocking(False)
        try:
            probe.connect(str(path))
        except BlockingIOError:  # it listens, and more wait than it takes in
            return True
        except PermissionError:
            return True  # there is one; whether it answers is not for this user to know
        except (OSError, ValueError):
            return False
    return True


def _write_csv(arguments: Namespace, told: Told) -> int:
    from hobnail.workshop.log.sheet import write

    with contextlib.ExitStack() as stack:
        if arguments.csv == "-":
            out = sys.stdout
        else:
            out = stack.enter_context(Path(arguments.csv).open("w", encoding="utf-8", newline=""))
        written, left_out = write(out, told.runs, told.first_s)
    where = "standard output" if arguments.csv == "-" else arguments.csv
    print(f"{written} ticks written to {where}", file=sys.stderr)
    if left_out:
        print(f"{left_out} ticks of a robot with other joints are left out", file=sys.stderr)
    if not written:
        print("no tick with pulses is kept of that time; without --since or --last: all", file=sys.stderr)
    return 0


def as_json(told: Told) -> dict[str, object]:
    """The same as a document: times in UTC and on the robot's own clock, SI units."""
    from hobnail.workshop.log.incident import tick_at

    happened = told.incident
    row = tick_at(told.runs, happened.cause) if happened else None
    return {
        "sources": [str(path) for path in told.material.sources],
        "notes": told.material.notes,
        "runs": [_run_json(run) for run in told.runs],
        "incident": happened
        and {
            "alarms": [_entry_json(alarm) for alarm in happened.alarms],
            "asked": happened.asked and _entry_json(happened.asked),
            "over": happened.over and _entry_json(happened.over),
            "next": happened.next,
            "tick": _row_json(row),
        },
        "entries": [_entry_json(entry) for entry in told.shown],
    }


def _run_json(run: Run) -> dict[str, object]:
    from hobnail.workshop.log.runs import moment

    first_s, last_s = run.span_s
    return {
        "run": run.name,
        "robot": run.robot,
        "first_utc": moment(run.wall_s(first_s)).isoformat(timespec="milliseconds"),
        "last_utc": moment(run.wall_s(last_s)).isoformat(timespec="milliseconds"),
        "first_monotonic_s": first_s,
        "last_monotonic_s": last_s,
        "ended": run.has_ended,
        "ticks": len(run.rows),
    }


def _entry_json(entry: Entry) -> dict[str, object]:
    from hobnail.workshop.log.runs import moment

    told: dict[str, object] = {
        "time_utc": moment(entry.wall_s).isoformat(timespec="milliseconds"),
        "monotonic_s": entry.monotonic_s,
        "run": entry.run,
        "kind": entry.kind,
        "name": entry.name,
        "grade": "alarm" if entry.alarm else "warning" if entry.warning else "",
        "who": entry.who,
        "text": entry.text,
        "next": entry.next,
        "count": entry.count,
    }
    if math.isfinite(entry.until_s):
        told["until_utc"] = moment(entry.until_s).isoformat(timespec="milliseconds")
    return told


def _row_json(row: Row | None) -> dict[str, object] | None:
    if row is None:
        return None
    numbers = asdict(row)
    return {name: _plain(value) for name, value in numbers.items()}


def _plain(value: Any) -> Any:
    if isinstance(value, tuple):
        return [_plain(part) for part in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _width() -> int | None:
    """Columns of the terminal; None where there is none: a line of a pipe is not broken."""
    return shutil.get_terminal_size().columns if sys.stdout.isatty() else None


def _time(text: str) -> datetime:
    """An argparse type: a local time, with a day or without."""
    for form in ("%H:%M", "%H:%M:%S"):
        with contextlib.suppress(ValueError):
            return datetime.strptime(text, form)
    try:
        return datetime.fromisoformat(text)
    except ValueError:
        raise ArgumentTypeError(
            f"--since is {text!r}, allowed a time such as 14:30, 14:30:05 or 2026-03-01T14:30"
        ) from None
