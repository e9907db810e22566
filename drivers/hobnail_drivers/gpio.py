"""A GPIO output line, through libgpiod; levels as booleans, True for high.

The only line that hobnail drives is a PWM board's /OE pin: high cuts its outputs.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable

from hobnail_drivers.libraries import load


class OutputLine(ABC):
    """One output line.  Methods raise OSError."""

    @abstractmethod
    def set(self, high: bool) -> None:
        """Drive the line high or low."""

    @abstractmethod
    def close(self) -> None:
        """Let go of the line; what it does then is up to the board's pull resistors."""


class GpiodOutputLine(OutputLine):
    """A line of a GPIO chip such as /dev/gpiochip0, by its number."""

    def __init__(self, chip: str, line: int) -> None:
        """Take the line and drive it high.  Raises OSError, MissingLibraryError."""
        gpiod = load("gpiod", "gpiod")
        self._values = (gpiod.line.Value.INACTIVE, gpiod.line.Value.ACTIVE)
        self._line = line
        settings = gpiod.LineSettings(direction=gpiod.line.Direction.OUTPUT, output_value=self._values[1])
        self._request = gpiod.request_lines(device(chip), consumer="hobnail", config={line: settings})

    def set(self, high: bool) -> None:
        self._request.set_value(self._line, self._values[high])

    def close(self) -> None:
        self._request.release()


OpenLine = Callable[[str, int], OutputLine]


def device(chip: str) -> str:
    """The device file of a chip given by its name or by its path."""
    return chip if "/" in chip else f"/dev/{chip}"
