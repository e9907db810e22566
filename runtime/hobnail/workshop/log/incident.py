"""The last time that something went wrong: from its first cause to its end, and what is shown of it; s."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from hobnail.service.recorder import Row
from hobnail.service.states import State
from hobnail.workshop.log.runs import Run
from hobnail.workshop.log.story import Entry

BEFORE_S, AFTER_S = 30.0, 10.0  # shown around an incident
QUIET_S = 60.0  # shown where there was none
STOP = "stop"
ROUNDED_S = 1e-5  # lines of the log are rounded to the microsecond


@dataclass(frozen=True, slots=True)
class Incident:
    """Alarms that belong together, oldest first; `over` is what ended it, None: it lasts, so far as is known.

    `asked` is the request that made the stop, where one did.
    """

    alarms: tuple[Entry, ...]
    over: Entry | None
    asked: Entry | None

    @property
    def cause(self) -> Entry:
        """The first of its alarms."""
        return self.alarms[0]

    @property
    def next(self) -> str:
        """What to do, if anything is left to do."""
        if self.over is not None:
            return ""
        if self.cause.next:
            return self.cause.next
        if any(alarm.kind == STOP for alarm in self.alarms):
            return "look at the robot, then `hobnail reset`, then `hobnail stand`"
        return "look at the robot and at its supply; see `hobnail state` and `hobnail doctor`"


def last_incident(told: Sequence[Entry]) -> Incident | None:
    """The last one in the entries of all runs, oldest first; None when nothing went wrong."""
    found: Incident | None = None
    alarms: list[Entry] = []
    lasting: set[str] = set()
    requests: list[Entry] = []
    for entry in told:
        if alarms and entry.run != alarms[-1].run:
            # What was latched went with its program.
            found, alarms, lasting = _made(alarms, entry, requests), [], set()
        if entry.kind == "command" and entry.text.startswith("stop"):
            requests.append(entry)
        if entry.alarm:
            alarms.append(entry)
            lasting.add(STOP if entry.kind == STOP else entry.name)
        elif alarms and _ends(entry, lasting):
            found, alarms, lasting = _made(alarms, entry, requests), [], set()
    return _made(alarms, None, requests) if alarms else found


def _ends(entry: Entry, lasting: set[str]) -> bool:
    if entry.kind == "over":
        lasting.discard(entry.name)
    elif entry.kind == "state" and entry.name == State.OFF:
        lasting.discard(STOP)  # the only way out of `stopped`
    return not lasting


def _made(alarms: list[Entry], over: Entry | None, requests: list[Entry]) -> Incident:
    stop = next((alarm for alarm in alarms if alarm.kind == STOP), None)
    asked = None
    if stop is not None:
        asked = next(
            (
                request
                for request in reversed(requests)
                if request.run == stop.run
                and stop.monotonic_s - 1.0 <= request.monotonic_s <= stop.monotonic_s
                and f"({request.who.partition(' (')[0]})" in stop.text
            ),
            None,
        )
    return Incident(tuple(alarms), over, asked)


def around(told: Sequence[Entry], incident: Incident | None) -> list[Entry]:
    """What is shown by default: the time around the incident, else the last minute."""
    if incident is None:
        return last(told, QUIET_S)
    first, final = incident.alarms[0], incident.alarms[-1]
    return [
        entry
        for entry in told
        if (
            first.monotonic_s - BEFORE_S <= entry.monotonic_s <= final.monotonic_s + AFTER_S
            if entry.run == first.run
            else first.wall_s - BEFORE_S <= entry.wall_s <= final.wall_s + AFTER_S
        )
    ]


def last(told: Sequence[Entry], seconds: float) -> list[Entry]:
    """The entries of so many seconds before the newest, by its run's clock, and by the wall's in others."""
    if not told:
        return []
    newest = told[-1]
    return [
        entry
        for entry in told
        if (
            entry.monotonic_s >= newest.monotonic_s - seconds
            if entry.run == newest.run
            else entry.wall_s >= newest.wall_s - seconds
        )
    ]


def tick_at(runs: Sequence[Run], entry: Entry) -> Row | None:
    """The last tick before an entry that had pulses, None where none of that time is kept."""
    rows = next((run.rows for run in runs if run.name == entry.run), [])
    before = [row for row in rows if row.time_s < entry.monotonic_s - ROUNDED_S]
    return before[-1] if before and entry.monotonic_s - before[-1].time_s < 1.0 else None
