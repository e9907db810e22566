"""A GPIO output line, through libgpiod; levels as booleans, True for high.

The only line that hobnail drives is a PWM board's /OE pin: high cuts its outputs.
"""

from __future__ import annotations

import errno
from abc import ABC, abstractmethod
from collections.abc import Callable

from hobnail_drivers.errors import BusError
from hobnail_drivers.libraries import load

ADVICE = {
    errno.ENOENT: "there is no such GPIO chip: `gpiodetect` lists those that there are",
    errno.EINVAL: "the chip has no such line, or not with these settings: `gpioinfo` lists its lines",
    errno.EACCES: "no permission: add this user to the group gpio, then log in again",
    errno.EBUSY: "another program or driver holds the line: `gpioinfo` says which",
}


class OutputLine(ABC):
    """One output line.  Methods raise BusError."""

    @abstractmethod
    def set(self, high: bool) -> None:
        """Drive the line high or low."""

    @abstractmethod
    def close(self) -> None:
        """Let go of the line; what it does then is up to the board's pull resistors."""


class GpiodOutputLine(OutputLine):
    """A line of a GPIO chip such as /dev/gpiochip0, by its number."""

    def __init__(self, chip: str, line: int) -> None:
        """Take the line and drive it high.  Raises BusError, MissingLibraryError."""
        gpiod = load("gpiod", "gpiod")
        self._values = (gpiod.line.Value.INACTIVE, gpiod.line.Value.ACTIVE)
        self._chip, self._line = chip, line
        settings = gpiod.LineSettings(direction=gpiod.line.Direction.OUTPUT, output_value=self._values[1])
        try:
            self._request = gpiod.request_lines(device(chip), consumer="hobnail", config={line: settings})
        except OSError as error:
            raise line_error(error, chip, line) from error

    def set(self, high: bool) -> None:
        try:
            self._request.set_value(self._line, self._values[high])
        except OSError as error:
            raise line_error(error, self._chip, self._line) from error

    def close(self) -> None:
        self._request.release()


def line_user(chip: str, line: int) -> str | None:
    """Who holds a line, None when it is free; it is not taken.  Raises BusError, MissingLibraryError."""
    gpiod = load("gpiod", "gpiod")
    try:
        with gpiod.Chip(device(chip)) as opened:
            info = opened.get_line_info(line)
    except OSError as error:
        raise line_error(error, chip, line) from error
    except ValueError as error:  # the library's word for a line that the chip does not have
        raise line_error(OSError(errno.EINVAL, str(error)), chip, line) from error
    return (info.consumer or "somebody without a name") if info.used else None


OpenLine = Callable[[str, int], OutputLine]


def device(chip: str) -> str:
    """The device file of a chip given by its name or by its path."""
    return chip if "/" in chip else f"/dev/{chip}"


def line_error(error: OSError, chip: str, line: int) -> BusError:
    """The error to raise `from` one of the system, with advice."""
    number = error.errno or errno.EIO
    return BusError(number, ADVICE.get(number, error.strerror or str(error)), f"{chip} line {line}", "GPIO")
