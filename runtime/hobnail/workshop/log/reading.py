"""Files of a record -> the whole lines and rows in them, and in words what is missing; s.

Nothing is trusted: a file may be cut at any byte, of another program, or
written to while it is read.
"""

from __future__ import annotations

import json
import math
import os
import stat
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from hobnail.errors import EX_DATAERR, EX_NOPERM, HobnailError, RecordError
from hobnail.service.recorder import MAGIC, Ring, read_ring
from hobnail.workshop.log.places import LOG_NAMES

MOST_BYTES = 64_000_000  # far more than a file of ours has


@dataclass(frozen=True, slots=True)
class Event:
    """One line of a log.  `monotonic_s` is the robot's own clock, `wall_s` seconds since 1970."""

    run: str
    wall_s: float
    monotonic_s: float
    kind: str
    text: str
    details: Mapping[str, Any]


@dataclass(slots=True)
class Material:
    """Everything read: lines in the order of their files, rings, and `notes` of what is missing."""

    events: list[Event] = field(default_factory=list)
    rings: list[tuple[Path, Ring]] = field(default_factory=list)
    sources: list[Path] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)


def read(paths: Iterable[Path], *, strict: bool) -> Material:
    """Read every file.

    `strict`: one that is no record is an error; else it is noted, as long as
    another can be read.  Raises RecordError, OSError.
    """
    material = Material()
    failures: list[HobnailError | OSError] = []
    for path in dict.fromkeys(paths):
        try:
            _read_one(path, material)
        except (HobnailError, OSError) as error:
            if strict:
                raise
            failures.append(error)
            material.notes.append(f"{path}: {_why(error)}")
        else:
            material.sources.append(path)
    if failures and not material.sources:
        first = failures[0]
        problem = RecordError(f"nothing of the record can be read: {'; '.join(material.notes)}")
        problem.exit_code = EX_NOPERM if isinstance(first, PermissionError) else EX_DATAERR
        raise problem
    return material


def follow(material: Material) -> None:
    """Read the logs that the rings name and that are not read yet, as far as they can be."""
    folders = {ring.header["log_dir"] for _, ring in material.rings} - {""}
    paths = [Path(folder) / name for folder in sorted(folders) for name in LOG_NAMES]
    for path in paths:
        if path in material.sources or not os.path.exists(path):
            continue
        try:
            _read_one(path, material)
        except (HobnailError, OSError) as error:
            material.notes.append(f"{path}: {_why(error)}")
        else:
            material.sources.append(path)


def _read_one(path: Path, material: Material) -> None:
    status = os.stat(path)
    if not stat.S_ISREG(status.st_mode):
        raise _no_record(path, "is no file")
    if status.st_size > MOST_BYTES:
        raise _no_record(path, f"has {status.st_size} bytes, allowed {MOST_BYTES}")
    with path.open("rb") as file:
        data = file.read(MOST_BYTES)
    if data.startswith(MAGIC) or path.suffix == ".ring":
        _take_ring(path, material)
    else:
        _take_log(path, data, material)


def _take_ring(path: Path, material: Material) -> None:
    try:
        ring = read_ring(path)
    except HobnailError as error:
        raise _no_record(path, "is damaged at its beginning, or not a recording of hobnail") from error
    material.rings.append((path, ring))
    if ring.missing_bytes:
        material.notes.append(
            f"{path}: {ring.missing_bytes} bytes are cut off its end; {len(ring.rows)} whole ticks are read"
        )
    if ring.damaged > 1 or (ring.damaged and ring.missing_bytes == 0 and not _newest_is_damaged(ring)):
        material.notes.append(f"{path}: {ring.damaged} damaged ticks are left out")


def _newest_is_damaged(ring: Ring) -> bool:
    """The one place without a whole row is where the newest goes: it was being written."""
    numbers = [row.number for row in ring.rows]
    return not numbers or numbers == list(range(numbers[0], numbers[0] + len(numbers)))


def _take_log(path: Path, data: bytes, material: Material) -> None:
    *lines, rest = data.split(b"\n")
    events = [event for line in lines if line.strip() and (event := _event(line)) is not None]
    bad = sum(1 for line in lines if line.strip()) - len(events)
    last = _event(rest) if rest.strip() else None
    if last is not None:
        events.append(last)
    if not events and (bad or rest.strip()):
        raise _no_record(path, "has no line of hobnail's log")
    if rest.strip() and last is None:
        material.notes.append(f"{path}: its last line is cut off; {len(events)} whole lines are read")
    if bad:
        material.notes.append(f"{path}: {bad} damaged lines are left out")
    material.events += events


def _event(line: bytes) -> Event | None:
    """A line of the log; None when it is not whole, or none."""
    try:
        entry = json.loads(line)
        stamp = datetime.fromisoformat(entry.pop("time"))
        if stamp.tzinfo is None:
            stamp = stamp.replace(tzinfo=UTC)
        wall_s, monotonic_s = stamp.timestamp(), float(entry.pop("monotonic_s"))
        kind, text, run = entry.pop("kind"), entry.pop("text"), entry.pop("run", "")
    except (ValueError, TypeError, KeyError, AttributeError, OverflowError, RecursionError):
        return None
    if not (math.isfinite(monotonic_s) and all(isinstance(word, str) for word in (kind, text, run))):
        return None
    return Event(run, wall_s, monotonic_s, kind, text, entry)


def _no_record(path: Path, why: str) -> RecordError:
    problem = RecordError(
        f"{path} {why}: name an events.log or a .ring file of a robot, or the directory that holds them"
    )
    problem.exit_code = EX_DATAERR
    return problem


def _why(error: HobnailError | OSError) -> str:
    return error.strerror or str(error) if isinstance(error, OSError) else str(error)
