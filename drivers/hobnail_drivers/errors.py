"""Errors of the hardware abstraction, as one tree; no logic.

DriverError
|-- PulseError (ValueError)    a pulse outside its hard limits, or not a number; nothing was sent
|-- SettingsError (ValueError) boards, outputs and argument do not fit together; nothing was opened
|-- NotOpenError               used before `open` or after `close`
|-- SetupError                 the board answers, but does not hold what was written to it
|-- MissingLibraryError (ImportError)   a hardware library is not installed
`-- BusError (OSError)         a transfer failed; `errno` and `board` say where and why
"""

from __future__ import annotations


class DriverError(Exception):
    """Root of the tree."""


class PulseError(DriverError, ValueError):
    """A pulse outside its hard limits, or not a number; nothing was sent."""


class SettingsError(DriverError, ValueError):
    """Boards, outputs and argument do not fit together or the chip; nothing was opened."""


class NotOpenError(DriverError):
    """Used before `open` or after `close`."""


class SetupError(DriverError):
    """The board answers, but does not hold what was written to it."""


class MissingLibraryError(DriverError, ImportError):
    """A hardware library is not installed."""


class BusError(DriverError, OSError):
    """A transfer failed; `errno` is the system's, `board` the one addressed, `kind` what that is."""

    def __init__(self, errno: int, message: str, board: str, kind: str = "board") -> None:
        OSError.__init__(self, errno, message)
        self.board = board
        self.kind = kind

    def __str__(self) -> str:
        return f"{self.kind} {self.board}: {self.strerror} (errno {self.errno})"
