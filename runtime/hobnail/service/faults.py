"""What can go wrong, how bad it is, when it is over and what to do next; times in s, monotonic.

Pure: nothing here stops a robot or writes a log.  `hobnail.service.machine`
acts on what is latched; the loop writes the lines that `drain` returns.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from enum import Enum, IntEnum


class Severity(IntEnum):
    """What a fault does, mildest first."""

    WARN = 1  # told; work goes on
    HOLD = 2  # feet planted, stands; no walking while it lasts
    REST = 3  # lies down, then off; no waking while it lasts
    STOP = 4  # category 1 stop, latched
    CUT = 5  # category 0 stop, latched


class Clears(Enum):
    """When a fault is over."""

    QUIET = "by itself, when it has not come again for a while"
    COMMAND = "by a fresh command"
    RESET = "by `reset`, once its cause is gone"


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of fault; `quiet_s` counts only where it clears by itself."""

    name: str
    severity: Severity
    clears: Clears
    message: str
    next: str
    quiet_s: float = 10.0


KINDS: dict[str, Kind] = {
    kind.name: kind
    for kind in (
        Kind(
            "commander-lost",
            Severity.HOLD,
            Clears.COMMAND,
            "the walk command ran out, or its client went away; the robot stands",
            "send commands more often than their time-to-live, or end with `stand`",
        ),
        Kind(
            "bus-retried",
            Severity.WARN,
            Clears.QUIET,
            "a transfer to a board failed and was repeated",
            "check cable length, pull-ups and the bus clock before it gets worse",
        ),
        Kind(
            "bus-behind",
            Severity.WARN,
            Clears.QUIET,
            "frames take longer to send than a tick lasts; motion waits and is slower than commanded",
            "raise the bus clock, split the servos over two buses, or lengthen the period",
        ),
        Kind(
            "bus-error",
            Severity.CUT,
            Clears.RESET,
            "transfers to a board failed, repeats too; pulses are cut",
            "check the board's power, address and cable, then `reset`, then `stand`",
        ),
        Kind(
            "bus-stalled",
            Severity.CUT,
            Clears.RESET,
            "a transfer hangs; pulses are cut as soon as the bus lets go",
            "switch the servo supply off by hand if it stands; then check the bus wiring, and `reset`",
        ),
        Kind(
            "settings-lost",
            Severity.CUT,
            Clears.RESET,
            "a board no longer holds its settings, as after a brown-out; pulses are cut",
            "check the supply and its wiring under load, then `reset`, then `stand`",
        ),
        Kind(
            "tick-overrun",
            Severity.WARN,
            Clears.QUIET,
            "a tick came too late and others were skipped",
            "look for what else loads the board; allow real-time scheduling",
        ),
        Kind(
            "joint-clamped",
            Severity.HOLD,
            Clears.RESET,
            "the last clamp held a joint back: feet may have left their paths",
            "keep the log and run `hobnail check` on the configuration, then `reset`",
        ),
        Kind(
            "out-of-reach",
            Severity.WARN,
            Clears.QUIET,
            "a foot was asked to a point out of its reach and went to the nearest one",
            "lower the posture or the speed; run `hobnail check`",
        ),
        Kind(
            "client-flood",
            Severity.WARN,
            Clears.QUIET,
            "a client sends more than its share and is slowed down",
            "send at 50 requests a second or fewer",
        ),
        Kind(
            "recorder-behind",
            Severity.WARN,
            Clears.QUIET,
            "the log cannot be written as fast as it comes; lines are dropped and counted",
            "check the storage; the last minute in memory is not affected",
        ),
        Kind(
            "supply-low",
            Severity.REST,
            Clears.QUIET,
            "the servo supply is low; the robot lies down and goes off",
            "charge or change the battery; `stand` is taken again when the voltage is back",
        ),
        Kind(
            "supply-unread",
            Severity.WARN,
            Clears.QUIET,
            "the supply monitor does not answer; its voltage is not known",
            "check the monitor's address and wiring",
        ),
        Kind(
            "overload",
            Severity.WARN,
            Clears.QUIET,
            "by estimate (nothing measures it), a servo has held too much torque for too long",
            "let it rest; carry less, stand higher or walk with a gait that keeps more feet down",
        ),
        Kind(
            "configuration-changed",
            Severity.WARN,
            Clears.QUIET,
            "the configuration or calibration changed on disk; the running robot keeps the old one",
            "run `hobnail check`, then restart the service",
        ),
        Kind(
            "stop-input",
            Severity.STOP,
            Clears.RESET,
            "the stop input is open: pressed, or its wire is broken",
            "release the switch or mend the wire, then `reset`, then `stand`",
        ),
        Kind(
            "route-failed",
            Severity.WARN,
            Clears.QUIET,
            "a route ended before its last step",
            "read why in `state`, then send it again",
        ),
        Kind(
            "internal",
            Severity.CUT,
            Clears.RESET,
            "an error in hobnail itself; pulses are cut",
            "keep the log and report it; `reset`, then `stand`",
        ),
    )
}


@dataclass(slots=True)
class Fault:
    """A latched fault.  `lasting`: its cause is still there, so far as is known."""

    kind: Kind
    since_s: float
    last_s: float
    count: int
    lasting: bool
    detail: str

    def describe(self) -> dict[str, object]:
        """As `state` tells it."""
        message = f"{self.kind.message}: {self.detail}" if self.detail else self.kind.message
        return {
            "name": self.kind.name,
            "severity": self.kind.severity.name.lower(),
            "since_s": round(self.since_s, 3),
            "count": self.count,
            "message": message,
            "next": self.kind.next,
            "clears": self.kind.clears.value,
            "lasting": self.lasting,
        }


class Thinner:
    """First, then repeated N times: lets the 1st, 10th, 100th, ... line of a name through.

    After `quiet_s` without a line of that name, it counts from one again.
    """

    def __init__(self, quiet_s: float = 3600.0) -> None:
        self._quiet_s = quiet_s
        self._seen: dict[str, tuple[int, float]] = {}

    def line(self, name: str, text: str, now_s: float) -> str | None:
        """The line to write, or None."""
        count, last_s = self._seen.get(name, (0, now_s))
        if now_s - last_s > self._quiet_s:
            count = 0
        count += 1
        self._seen[name] = (count, now_s)
        if count == 1:
            return text
        if str(count).strip("0") == "1":
            return f"{text} (repeated {count} times)"
        return None


class Faults:
    """Every fault latched now, the first cause, and the lines for the log."""

    def __init__(self) -> None:
        self._latched: dict[str, Fault] = {}
        self._totals = dict.fromkeys(KINDS, 0)
        self._thinner = Thinner()
        self._lines: list[str] = []
        self.first_cause: str | None = None

    def report(self, name: str, now_s: float, detail: str = "", *, lasting: bool = False) -> Fault:
        """One occurrence; `lasting` True: the cause stays until `over` says otherwise."""
        kind = KINDS[name]
        self._totals[name] += 1
        fault = self._latched.get(name)
        if fault is None:
            fault = self._latched[name] = Fault(kind, now_s, now_s, 1, lasting, detail)
            if self.first_cause is None and kind.severity > Severity.WARN:
                self.first_cause = f"{name}: {detail or kind.message}"
        else:
            fault.last_s, fault.lasting, fault.count = now_s, lasting, fault.count + 1
        text = f"fault {name} ({kind.severity.name.lower()}): {detail or kind.message}; next: {kind.next}"
        self._tell(name, text, now_s)
        return fault

    def over(self, name: str, now_s: float) -> None:
        """The cause is gone; the fault stays latched until its clear condition."""
        fault = self._latched.get(name)
        if fault is not None and fault.lasting:
            fault.lasting, fault.last_s = False, now_s

    def update(self, now_s: float) -> None:
        """Clear what clears by itself."""
        for name, fault in tuple(self._latched.items()):
            quiet = fault.kind.clears is Clears.QUIET and now_s - fault.last_s >= fault.kind.quiet_s
            if quiet and not fault.lasting:
                self._clear(name, now_s)

    def commanded(self, now_s: float) -> None:
        """A fresh command was taken."""
        for name, fault in tuple(self._latched.items()):
            if fault.kind.clears is Clears.COMMAND:
                self._clear(name, now_s)

    def reset(self, now_s: float) -> list[Fault]:
        """Clear all whose cause is gone; what is left is returned."""
        for name, fault in tuple(self._latched.items()):
            if not fault.lasting:
                self._clear(name, now_s)
        return list(self._latched.values())

    def worst(self) -> Fault | None:
        """The gravest fault latched now, the oldest of equals."""
        return max(self._latched.values(), key=lambda fault: fault.kind.severity, default=None)

    def blocking(self, severities: Sequence[Severity]) -> Fault | None:
        """The first latched fault of one of these severities that a command does not clear."""
        for fault in self._latched.values():
            if fault.kind.severity in severities and fault.kind.clears is not Clears.COMMAND:
                return fault
        return None

    def is_latched(self, name: str) -> bool:
        """That fault is latched now."""
        return name in self._latched

    def is_lasting(self, name: str) -> bool:
        """That fault is latched, and its cause is still there."""
        fault = self._latched.get(name)
        return fault is not None and fault.lasting

    def names(self) -> tuple[str, ...]:
        """All that are latched now."""
        return tuple(self._latched)

    def total(self, name: str) -> int:
        """Occurrences since the start, cleared ones included."""
        return self._totals[name]

    def describe(self) -> list[dict[str, object]]:
        """All latched faults, as `state` tells them."""
        return [fault.describe() for fault in self._latched.values()]

    def drain(self) -> list[str]:
        """The log lines since the last call, thinned out."""
        lines, self._lines = self._lines, []
        return lines

    def _clear(self, name: str, now_s: float) -> None:
        fault = self._latched.pop(name)
        self._tell(f"cleared {name}", f"fault {name} is over after {fault.count} times", now_s)
        if all(left.kind.severity is Severity.WARN for left in self._latched.values()):
            self.first_cause = None

    def _tell(self, key: str, text: str, now_s: float) -> None:
        line = self._thinner.line(key, text, now_s)
        if line is not None:
            self._lines.append(line)


def run_each(actions: Iterable[Callable[[], object]]) -> list[Exception]:
    """Run every action, each guarded by itself, so that one that fails does not keep the
    next from running; the errors are returned for the log."""
    errors: list[Exception] = []
    for action in actions:
        try:
            action()
        except Exception as error:  # noqa: BLE001 -- a stop goes on, whatever fails
            errors.append(error)
    return errors
