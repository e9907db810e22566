"""The calibration file at work: values kept as they are accepted, dated and signed; who measured what when.

Every change reads the file anew and replaces it as a whole, so that nothing that
was kept can be lost, whatever comes after.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from hobnail.config.calibration import (
    WALK,
    WRITTEN,
    Calibration,
    Change,
    apply_calibration,
    calibration_path,
    given,
    read_calibration,
    write_calibration,
)
from hobnail.config.calibration_history import (
    changed,
    measured_at,
    part_named,
    read_values,
    standing,
    undone,
)
from hobnail.errors import CalibrationError, CommandError, Problem
from hobnail.robot import Robot

STALE_DAYS = 180  # horns creep and servos are swapped: worth a look after half a year (common practice)
_WHO = r"[\w .,'@+-]{1,60}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """One measured value as the file shows it; `when` and `who` empty where no record says so."""

    part: str
    key: str
    value: str
    when: str = ""
    who: str = ""
    days: int | None = None

    @property
    def is_stale(self) -> bool:
        """Old enough to be looked at again."""
        return self.days is not None and self.days >= STALE_DAYS


def utc_now() -> datetime:
    """The wall clock, which nothing but a record may use."""
    return datetime.now(UTC)


class Ledger:
    """The calibration of one robot: `configured` is the robot as its configuration file has it.

    Raises CommandError for a name that a record cannot hold, CalibrationError
    for a file that cannot be read.
    """

    def __init__(
        self, config: str | Path, configured: Robot, who: str, *, now: Callable[[], datetime] = utc_now
    ) -> None:
        if not re.fullmatch(_WHO, who):
            raise CommandError(
                f"--who is {who[:70]!r}; allowed: a name of 1 to 60 letters, digits, spaces and . , ' @ + -"
            )
        self.path = calibration_path(config)
        self.configured = configured
        self.who = who
        self._now = now
        self.calibration  # noqa: B018  a file that cannot be used is told at once

    @property
    def calibration(self) -> Calibration:
        """As the file is now."""
        return read_calibration(self.path, self.configured)

    @property
    def robot(self) -> Robot:
        """The robot with what was measured by now."""
        return apply_calibration(self.configured, self.calibration)

    def check_writable(self) -> None:
        """Find out before the work whether its fruits can be kept.  Raises CalibrationError."""
        folder = Path(os.path.realpath(self.path)).parent
        if not os.access(folder, os.W_OK | os.X_OK):
            allowed = "a folder that this user may write to"
            hint = "Nothing measured could be kept: ask for the right, or be another user."
            raise CalibrationError([Problem(str(self.path), 0, 0, "", "no permission", allowed, hint)])

    def keep(self, name: str, values: Mapping[str, Any]) -> None:
        """Write measured values of a part down; on the disk when this returns."""
        self._write(
            changed(self.calibration, self.configured, name, when=self._stamp(), who=self.who, **values)
        )

    def forget(self, name: str) -> None:
        """Let the configuration stand again for everything measured at a part."""
        measured = measured_at(self.calibration, name, part_named(self.configured, name))
        self.keep(name, dict.fromkeys(given(measured)))

    def set(self, name: str, settings: list[str]) -> None:
        """Keep values typed as `key=value`, in the words of the file."""
        lines = []
        for setting in settings:
            key, equals, value = setting.partition("=")
            if not equals or "\n" in setting or "\r" in setting:
                raise CommandError(f"--set is {setting[:60]!r}; allowed: KEY=VALUE, such as trim_deg=-3.5")
            lines.append(f"{key.strip()}: {value.strip()}")
        values = read_values(part_named(self.configured, name), "\n".join(lines) + "\n", "--set")
        self.keep(name, values)

    def undo(self) -> Change:
        """Take the newest change back; the entry that says so."""
        new = undone(self.calibration, self.configured, when=self._stamp(), who=self.who)
        self._write(new)
        return new.history[-1]

    def entries(self) -> list[Entry]:
        """Every measured value, with the newest record of it; joints first, in their order."""
        calibration = self.calibration
        newest = {change.what: change for change in standing(calibration.history)}
        names = [joint.name for joint in self.configured.joints]
        names += [board.name for board in self.configured.boards]
        found = []
        for name in (*names, WALK):
            for attribute, value in given(
                measured_at(calibration, name, part_named(self.configured, name))
            ).items():
                key, written = WRITTEN[attribute]
                found.append(self._entry(name, key, written(value), newest.get(f"{name} {key}")))
        return found

    def _entry(self, part: str, key: str, value: str, change: Change | None) -> Entry:
        if change is None or change.new != value:  # changed by hand since
            return Entry(part=part, key=key, value=value)
        days = self._days_since(change.when)
        return Entry(part=part, key=key, value=value, when=change.when, who=change.who, days=days)

    def _days_since(self, when: str) -> int | None:
        try:
            then = datetime.fromisoformat(when)
        except ValueError:
            return None
        if then.tzinfo is None:
            then = then.replace(tzinfo=UTC)
        return max(0, (self._now() - then).days)

    def _stamp(self) -> str:
        return self._now().strftime("%Y-%m-%dT%H:%M:%SZ")

    def _write(self, calibration: Calibration) -> None:
        write_calibration(self.path, calibration)
