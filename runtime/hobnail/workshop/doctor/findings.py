"""Findings with their grades, and how probes are run: each guarded by itself, each within its time; s.

Knows nothing of robots.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from enum import StrEnum

LIMIT_S = 8.0  # of one probe


class Grade(StrEnum):
    """How bad a finding is."""

    FINE = "fine"
    NOTE = "note"  # worth knowing
    MEND = "mend"  # keeps the robot from working


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing found out about `subject`; `next` says what to do, where there is something to do."""

    subject: str
    grade: Grade
    text: str
    next: str = ""


@dataclass(frozen=True, slots=True)
class Probe:
    """One look at something.  `hangs` is what it means, and what to do, when it does not come back."""

    subject: str
    look: Callable[[], Iterable[Finding]]
    hangs: str = "see what the machine is busy with, then try again"


def fine(subject: str, text: str) -> Finding:
    """Nothing to do."""
    return Finding(subject, Grade.FINE, text)


def note(subject: str, text: str, next: str = "") -> Finding:
    """Worth knowing."""
    return Finding(subject, Grade.NOTE, text, next)


def mend(subject: str, text: str, next: str) -> Finding:
    """Must be mended."""
    return Finding(subject, Grade.MEND, text, next)


def examine(probes: Sequence[Probe], *, limit_s: float = LIMIT_S) -> Iterator[Finding]:
    """The findings of every probe, in order, as they come.

    A probe that fails or hangs is a finding of its own.  One that hangs is left
    behind in its thread: a transfer cannot be called back.
    """
    for probe in probes:
        found: list[Finding] = []
        thread = threading.Thread(target=_run, args=(probe, found), daemon=True)
        thread.start()
        thread.join(limit_s)
        if thread.is_alive():
            # What comes in later is not told: the list is copied.
            yield from [*found, mend(probe.subject, f"no result within {limit_s:g} s", probe.hangs)]
        else:
            yield from found


def _run(probe: Probe, found: list[Finding]) -> None:
    try:
        found.extend(probe.look())  # one by one: what came before it fails is kept
    except Exception as error:  # noqa: BLE001 -- one probe must not take the others with it
        found.append(
            mend(
                probe.subject,
                f"could not be looked at: {type(error).__name__}: {error}",
                "mend what this says; if it says nothing to you, report it with the command you gave",
            )
        )
