"""A run told as entries in the order of its own clock, repeated ones folded; s.

What the log says is taken from it; from the ticks come those that were skipped
and motion that was slowed down, and, where no log is there, all the rest.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from itertools import pairwise

from hobnail.service.faults import KINDS
from hobnail.service.recorder import Row
from hobnail.service.states import State
from hobnail.service.writer import asker
from hobnail.workshop.log.reading import Event
from hobnail.workshop.log.runs import Run

SLOWED = 0.95  # less than this share of the commanded speed is told
TOGETHER_S = 1.0  # skipped ticks no further apart are told as one
CLOCK_DIGITS = 5  # lines are rounded to the microsecond, ticks are not
ROUNDING = 1e-4  # ticks keep four bytes a number
SAME_S = 0.002  # a line and a tick this close are the same occurrence

_FAULT = re.compile(
    r"fault (?P<name>[\w-]+) \((?P<severity>\w+)\): (?P<why>.*?); next: (?P<next>.*)", re.DOTALL
)
_OVER = re.compile(r"fault (?P<name>[\w-]+) is over")
_PASSAGE = re.compile(r"(?P<before>\w+) -> (?P<after>\w+)(?:: (?P<why>.*))?", re.DOTALL)
_REPEATED = re.compile(r" \(repeated (\d+) times\)$")
_DIGITS = re.compile(r"\d+")


@dataclass(frozen=True, slots=True)
class Entry:
    """One thing that happened.

    `kind` is start, command, state, stop, fault, over, skipped, slowed, clock,
    client, error, log, cut-off or end; `name` that of the fault or of the state
    that was reached; `alarm`: it held up, stopped or cut the robot, or is an
    error of the program.  `count` times until `until_s`, folded.
    """

    run: str
    monotonic_s: float
    wall_s: float
    kind: str
    text: str
    name: str = ""
    next: str = ""
    who: str = ""
    alarm: bool = False
    warning: bool = False
    count: int = 1
    until_s: float = math.nan  # wall clock of the last one, where count > 1


def entries(run: Run, *, is_over: bool) -> list[Entry]:
    """Everything that is known of a run; `is_over`: its program is known to have ended."""
    told = [_of_event(event) for event in run.events]
    told += _skipped(run) + _slowed(run) + _clock_steps(run)
    if not run.events:
        told += _of_rows(run)
    # Sorted by time, at equal times in the order above: what is asked for comes before what follows.
    told.sort(key=lambda entry: round(entry.monotonic_s, CLOCK_DIGITS))
    if is_over and not run.has_ended and (run.events or run.rows[-1].state is not State.RESTING):
        told.append(_cut_off(run))
    return told


def fold(told: Iterable[Entry]) -> list[Entry]:
    """The same, those that repeat the one before made one with it."""
    folded: list[Entry] = []
    for entry in told:
        last = folded[-1] if folded else None
        if last is not None and _likeness(last) == _likeness(entry) and entry.kind != "cut-off":
            # The service counts for itself what it does not write.
            count = max(last.count + 1, entry.count)
            folded[-1] = replace(last, count=count, until_s=entry.wall_s)
        else:
            folded.append(entry)
    return folded


def _likeness(entry: Entry) -> tuple[str, ...]:
    text = "" if entry.kind in ("skipped", "slowed") else _DIGITS.sub("#", entry.text)
    return entry.run, entry.kind, entry.name, entry.who, text


def _of_event(event: Event) -> Entry:
    text = event.text
    count = 1
    if repeated := _REPEATED.search(text):
        text, count = text[: repeated.start()], int(repeated[1])
    plain = Entry(event.run, event.monotonic_s, event.wall_s, event.kind, text, count=count)
    if event.kind == "fault" and (fault := _FAULT.fullmatch(text)):
        severity = fault["severity"]
        return replace(
            plain,
            name=fault["name"],
            text=f"{fault['name']} ({severity}): {fault['why']}",
            next=fault["next"],
            alarm=severity != "warn",
            warning=severity == "warn",
        )
    if event.kind == "fault" and (over := _OVER.match(text)):
        return replace(plain, kind="over", name=over["name"])
    if event.kind == "state" and (passage := _PASSAGE.fullmatch(text)):
        return _passage(plain, passage["before"], passage["after"], passage["why"] or "")
    if event.kind == "error":
        return replace(plain, text=_last_line(text), alarm=True)
    if event.kind == "log":
        return replace(plain, warning=True)
    if "client" in event.details:
        return replace(plain, who=asker(event.details))
    return plain


def _passage(plain: Entry, before: str, after: str, why: str) -> Entry:
    if after == State.STOPPING or (after == State.STOPPED and before != State.STOPPING):
        # Where there is nothing to lower, both categories cut at once.
        lay = before in (State.OFF, State.WAKING, State.RESTING)
        what = "a stop" if lay else f"a stop of category {1 if after == State.STOPPING else 0}"
        text = f"{before} -> {after}, {what}" + (f": {why}" if why else "")
        return replace(plain, kind="stop", name=after, text=text, alarm=True)
    if after == State.STOPPED:
        return replace(plain, name=after, text=f"{before} -> {after}, pulses ended")
    return replace(plain, name=after)


def _last_line(traceback: str) -> str:
    """What a traceback comes to; all of it is in the file."""
    lines = [line.strip() for line in traceback.splitlines() if line.strip()]
    return lines[-1] if lines else ""


def _entry(run: Run, monotonic_s: float, kind: str, text: str) -> Entry:
    return Entry(run.name, monotonic_s, run.wall_s(monotonic_s), kind, text)


def _skipped(run: Run) -> list[Entry]:
    period_s = float(run.header.get("period_s", math.inf))
    told = [event.monotonic_s for event in run.events if event.text.startswith("fault tick-overrun (")]
    groups: list[list[Row]] = []
    for row in run.rows:
        if row.lateness_us * 1e-6 < period_s or any(abs(row.time_s - at_s) < SAME_S for at_s in told):
            continue
        if groups and row.time_s - groups[-1][-1].time_s < TOGETHER_S:
            groups[-1].append(row)
        else:
            groups.append([row])
    return [
        replace(_entry(run, rows[0].time_s, "skipped", _late(rows, period_s)), warning=True)
        for rows in groups
    ]


def _late(rows: list[Row], period_s: float) -> str:
    """What ticks that came late mean; each stands for those that were skipped before it."""
    skipped = sum(int(row.lateness_us * 1e-6 / period_s + ROUNDING) for row in rows)
    worst_ms = max(row.lateness_us for row in rows) / 1000
    if len(rows) == 1:
        return f"{skipped} tick(s) skipped: one was {worst_ms:.1f} ms late"
    span_s = rows[-1].time_s - rows[0].time_s
    return (
        f"{skipped} ticks skipped within {span_s:.2f} s: {len(rows)} were late, by {worst_ms:.1f} ms at worst"
    )


def _slowed(run: Run) -> list[Entry]:
    found = []
    span: list[Row] = []
    for row in [*run.rows, None]:
        if row is not None and row.slowdown < SLOWED:
            span.append(row)
        elif span:
            least, long_s = min(each.slowdown for each in span), span[-1].time_s - span[0].time_s
            text = f"slowed to {least:.0%} at the least, over {long_s:.2f} s: a joint is at its speed limit"
            found.append(_entry(run, span[0].time_s, "slowed", text))
            span = []
    return found


def _clock_steps(run: Run) -> list[Entry]:
    return [
        replace(
            _entry(run, at_s, "clock", ""),
            text=f"the wall clock was set by {moved_s:+.1f} s; times above are as it showed them before",
            warning=True,
        )
        for at_s, moved_s in run.clock_steps()
    ]


def _of_rows(run: Run) -> Iterator[Entry]:
    """States, faults and walk commands, from the ticks alone; why a stop was made is not in them."""
    for before, after in pairwise(run.rows):
        at_s = after.time_s
        for name in set(after.faults) - set(before.faults):
            kind = KINDS.get(name)
            grave = kind is None or kind.severity.name != "WARN"
            text = f"{name} ({kind.severity.name.lower()}): {kind.message}" if kind else name
            told = replace(_entry(run, at_s, "fault", text), name=name, alarm=grave, warning=not grave)
            yield replace(told, next=kind.next if kind else "")
        for name in set(before.faults) - set(after.faults):
            yield replace(_entry(run, at_s, "over", f"fault {name} is over"), name=name)
        if any(after.command) and not any(before.command):
            vx, vy, rate = after.command
            text = f"walk {vx:+.3f} m/s ahead, {vy:+.3f} m/s left, {math.degrees(rate):+.1f} deg/s"
            yield _entry(run, at_s, "command", text)
        if before.state is not after.state:
            plain = _entry(run, at_s, "state", f"{before.state} -> {after.state}")
            yield _passage(plain, before.state, after.state, "")


def _cut_off(run: Run) -> Entry:
    _, last_s = run.span_s
    state = next((entry["after"] for event in reversed(run.events) if (entry := _last_passage(event))), "")
    state = state or str(run.rows[-1].state if run.rows else State.OFF)
    text = f"the program ends here without a word: killed, crashed, or power lost; its last state is {state}"
    # A robot that lay or was off lost nothing.
    alarm = state not in (State.OFF, State.RESTING, State.STOPPED)
    if not run.events:
        text = (
            f"the ticks end here, {state}: by a stop, or the program was killed; there is no log to say which"
        )
        alarm = alarm and state != State.STOPPING
    return replace(_entry(run, last_s, "cut-off", text), name=state, alarm=alarm, warning=True)


def _last_passage(event: Event) -> re.Match[str] | None:
    return _PASSAGE.fullmatch(event.text) if event.kind == "state" else None
