"""Every error that hobnail raises on purpose, as one tree; no logic.

    HobnailError
    |-- ConfigError (ValueError)      a file cannot be used; carries every problem found
    |   |-- CalibrationError          the same, for a calibration file
    |   `-- RouteError                the same, for a route file
    |-- CommandError (ValueError)     a value given to a command is out of its range
    |-- StateError                    the request does not fit the state the robot is in
    |   `-- StoppedError              a stop is latched; `reset` comes first
    |-- CommanderError                somebody else holds the claim to command
    |-- FaultError                    a latched fault forbids the request
    |-- InputEndedError (EOFError)    the answers of a dialogue ended before its questions did
    |-- RecordError                 there is nothing to read of what the robot did, or it is damaged
    |-- DriverUnavailableError        no such driver, or its library or device is missing
    `-- ServiceError
        |-- ServiceUnavailableError (ConnectionError)   nothing answers on the socket
        |-- ServiceTimeoutError (TimeoutError)          the answer did not come in time
        `-- ProtocolError                               the answer is not JSON-RPC 2.0

Messages are sentences for the person at the bench: the name, the value with
its unit, what is allowed, and what to do next.  `exit_code` is the sysexits
code that a command ends with when the error reaches it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

EX_USAGE = 64
EX_DATAERR = 65
EX_NOINPUT = 66
EX_UNAVAILABLE = 69
EX_SOFTWARE = 70
EX_TEMPFAIL = 75
EX_NOPERM = 77
EX_CONFIG = 78


class HobnailError(Exception):
    """Root of the tree; `cause` is the machine-readable name sent over the socket."""

    exit_code: int = EX_SOFTWARE
    cause: str = "internal"


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing wrong in a file.

    `line` and `column` count from 1; 0 means that the file as a whole is meant.
    `key_path` is dotted, with indices in brackets: `legs[2].upper_mm`.
    """

    file: str
    line: int
    column: int
    key_path: str
    found: str
    allowed: str
    hint: str = ""

    def __str__(self) -> str:
        where = f"{self.file}:{self.line}:{self.column}" if self.line else self.file
        text = f"{where}: {self.key_path or '(top level)'}: found {self.found}; allowed: {self.allowed}"
        return f"{text}. {self.hint}" if self.hint else text


class ConfigError(HobnailError, ValueError):
    """A file cannot be used as it stands; `problems` lists everything wrong with it."""

    exit_code = EX_CONFIG
    cause = "config"

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class CalibrationError(ConfigError):
    """A calibration file cannot be used as it stands."""

    cause = "calibration"


class RouteError(ConfigError):
    """A route file cannot be used as it stands."""

    cause = "route"


class CommandError(HobnailError, ValueError):
    """A value given to a command is not a number, or out of its range."""

    exit_code = EX_USAGE
    cause = "value"


class StateError(HobnailError):
    """The request does not fit the state that the robot is in."""

    exit_code = EX_TEMPFAIL
    cause = "state"


class StoppedError(StateError):
    """A stop is latched: nothing moves until `reset`, a fresh wake and a fresh command."""

    cause = "stopped"


class CommanderError(HobnailError):
    """Another client holds the claim to command the robot."""

    exit_code = EX_TEMPFAIL
    cause = "commander"


class FaultError(HobnailError):
    """A latched fault forbids the request."""

    exit_code = EX_TEMPFAIL
    cause = "fault"


class InputEndedError(HobnailError, EOFError):
    """The answers of a dialogue ended before its questions did; what was accepted is kept."""

    exit_code = EX_DATAERR
    cause = "input"


class RecordError(HobnailError):
    """What a robot has recorded cannot be found or read."""

    exit_code = EX_NOINPUT
    cause = "record"


class DriverUnavailableError(HobnailError):
    """The driver asked for does not exist, or its library or device is missing."""

    exit_code = EX_UNAVAILABLE
    cause = "driver"


class ServiceError(HobnailError):
    """The running robot could not be talked to."""

    exit_code = EX_UNAVAILABLE
    cause = "service"


class ServiceUnavailableError(ServiceError, ConnectionError):
    """Nothing answers on the socket."""


class ServiceTimeoutError(ServiceError, TimeoutError):
    """The answer did not come in time."""


class ProtocolError(ServiceError):
    """What came back is not JSON-RPC 2.0."""
