"""A normally-closed contact, such as that of a stop button, on a GPIO line through libgpiod.

The line is pulled up and the contact ties it to ground: an open contact, a
broken wire and a pulled plug all read the same, as open.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from datetime import timedelta

from hobnail_drivers.errors import NotOpenError
from hobnail_drivers.gpio import device, line_error
from hobnail_drivers.libraries import load


class Contact(ABC):
    """What says whether a contact is closed."""

    @abstractmethod
    def is_closed(self) -> bool:
        """Whether current can flow now.  Raises BusError, which has to count as open."""

    @abstractmethod
    def close(self) -> None:
        """Let go of the line; may be called twice."""


class SimulatedContact(Contact):
    """A contact that is as it is told."""

    def __init__(self, *, closed: bool = True) -> None:
        self.closed = closed

    def is_closed(self) -> bool:
        return self.closed

    def close(self) -> None:
        pass


class GpioContact(Contact):
    """A contact between a line of a GPIO chip and ground, debounced by the kernel.

    Asks for the chip's pull-up, which some chips lack: wire one of a few
    kilohms.  A line shorted to ground reads closed: no software makes this a
    safety-rated input.
    """

    def __init__(self, chip: str, line: int, debounce_s: float = 0.01) -> None:
        """`chip` by name or path (gpiochip0).  Raises BusError, MissingLibraryError."""
        gpiod = load("gpiod", "gpiod")
        self._chip, self._line = chip, line
        self._low = gpiod.line.Value.INACTIVE
        settings = gpiod.LineSettings(
            direction=gpiod.line.Direction.INPUT,
            bias=gpiod.line.Bias.PULL_UP,
            debounce_period=timedelta(seconds=debounce_s),
        )
        try:
            self._request = gpiod.request_lines(
                device(chip), consumer="hobnail-stop", config={line: settings}
            )
        except OSError as error:
            raise line_error(error, self._chip, self._line) from error
        self._is_open = True

    def is_closed(self) -> bool:
        if not self._is_open:
            raise NotOpenError(f"the contact on {self._chip} line {self._line} has been closed")
        try:
            return bool(self._request.get_value(self._line) == self._low)
        except OSError as error:
            raise line_error(error, self._chip, self._line) from error

    def close(self) -> None:
        if self._is_open:
            self._is_open = False
            self._request.release()
