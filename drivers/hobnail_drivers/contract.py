"""The contract that every servo driver keeps: pulses in microseconds, `None` for no signal.

A driver knows boards, channels and pulses; nothing of legs, angles or gaits.
It is used from one thread at a time, but not always from the same one; `cut`
alone may be called beside whatever else is under way.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import ClassVar, final

from hobnail_drivers.errors import NotOpenError, PulseError, SettingsError

Pulses = Sequence[float | None]


@dataclass(frozen=True, slots=True, kw_only=True)
class BoardSettings:
    """One PWM board as wired."""

    name: str
    bus: int
    address: int
    frame_hz: float
    oscillator_hz: float = 25_000_000.0
    output_enable: tuple[str, int] | None = None  # (gpio chip, line) of the /OE pin


@dataclass(frozen=True, slots=True, kw_only=True)
class Output:
    """One servo output: where it is, and the hard limits that no pulse may leave.

    `speed_us_s` and `dead_band_us` describe the servo on it for back ends that
    simulate one; hardware back ends ignore them.
    """

    board: str
    channel: int
    min_us: float
    max_us: float
    speed_us_s: float = 5000.0
    dead_band_us: float = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Health:
    """What the back end reads back of itself.

    `settings_kept` False: a board lost its settings (a brown-out, most often).
    `frame_hz` is the true frame rate of each board.
    """

    settings_kept: bool
    detail: str = ""
    frame_hz: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Sight:
    """One board as it was found: `problem` is empty when it can be used, `next` what to do about it;
    `pulsing`: some output sends pulses now."""

    board: str
    found: str
    problem: str = ""
    next: str = ""
    pulsing: bool = False


CHANNELS = 16  # of one board


def _check_settings(boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> None:
    places: dict[tuple[int, int], str] = {}
    for board in boards:
        place = (board.bus, board.address)
        if place in places:
            raise SettingsError(
                f"boards {places[place]} and {board.name} share address 0x{board.address:02x} on bus "
                f"{board.bus}: set one board's address pins otherwise"
            )
        places[place] = board.name
        if not (0.0 < board.frame_hz < math.inf and 0.0 < board.oscillator_hz < math.inf):
            raise SettingsError(
                f"board {board.name}: frame rate {board.frame_hz} Hz, oscillator {board.oscillator_hz} Hz; "
                "both must be positive numbers"
            )
    names = [board.name for board in boards]
    if len(set(names)) < len(names):
        raise SettingsError(f"two boards have the same name among {', '.join(names)}: rename one")
    taken: set[tuple[str, int]] = set()
    for output in outputs:
        where = f"board {output.board} channel {output.channel}"
        if output.board not in names:
            raise SettingsError(f"{where}: there is no such board; there are {', '.join(names) or 'none'}")
        if not 0 <= output.channel < CHANNELS:
            raise SettingsError(f"{where}: channels are 0 to {CHANNELS - 1}")
        if (output.board, output.channel) in taken:
            raise SettingsError(f"{where} is used by two outputs: give each its own")
        taken.add((output.board, output.channel))
        if not 0.0 < output.min_us < output.max_us:
            raise SettingsError(
                f"{where}: limits {output.min_us} to {output.max_us} us; allowed is a positive lower limit "
                "below the upper one"
            )


class Driver(ABC):
    """Writes servo pulses to one or more boards.

    Must: send no pulse before the first `write`; on `release` end every pulse
    on every board, trying each board even when another fails; survive `close`
    twice and `close` without `open`; raise only DriverError.
    May: be slow in `open`, `health` and `close`; `write` takes one bus
    transaction per board.
    Must not: fall back to another back end, retry by itself, or log.
    """

    takes_argument: ClassVar[bool] = False
    is_model: bool = False  # no hardware behind it: nothing moves in the room

    def __init__(
        self, boards: Sequence[BoardSettings], outputs: Sequence[Output], *, argument: str = ""
    ) -> None:
        """`outputs` fixes the order of `write`; `argument` is what follows the colon in
        a driver's name (`name:argument`), for back ends that take one.

        Raises SettingsError when two boards have one name or address, two
        outputs share a channel, an output names no board or has no room
        between its limits, or an argument is given to a back end that takes none.
        """
        _check_settings(boards, outputs)
        if argument and not self.takes_argument:
            raise SettingsError(
                f"{type(self).__name__} takes no argument, got {argument!r}: leave out the colon"
            )
        self.boards = tuple(boards)
        self.outputs = tuple(outputs)
        self.argument = argument
        self._lows_us = [output.min_us for output in self.outputs]
        self._highs_us = [output.max_us for output in self.outputs]
        self._is_open = False

    @final
    def open(self) -> None:
        """Find the boards, set them up with every output off, and verify it.

        Opening an open driver sets the boards up again.
        Raises BusError, SetupError, MissingLibraryError.
        """
        self._open()
        self._is_open = True

    @final
    def write(self, pulses_us: Pulses) -> None:
        """Send one frame: a pulse width in microseconds per output, None for no signal.

        Raises PulseError (nothing was sent), NotOpenError, BusError.
        """
        if not self._is_open:
            raise NotOpenError("the driver is not open: call open() first")
        if len(pulses_us) != len(self.outputs):
            raise PulseError(f"{len(pulses_us)} pulses for {len(self.outputs)} outputs; nothing was sent")
        for pulse, low, high in zip(pulses_us, self._lows_us, self._highs_us, strict=True):
            if pulse is not None and not low <= pulse <= high:
                self._refuse(pulses_us)
        self._write(pulses_us)

    @final
    def release(self) -> None:
        """End every pulse on every board now.  Raises BusError after trying all."""
        if not self._is_open:
            raise NotOpenError("the driver is not open: call open() first")
        self._release()

    @final
    def cut(self) -> None:
        """Switch outputs off by what needs no bus, such as an output-enable line, where there is any.

        From any thread, at any time, while another call hangs as well.  It only
        comes before `release`, which has to follow as soon as the bus lets it:
        until a `release` or `open` that begins after it, outputs stay cut,
        whatever is written.  Raises BusError.
        """
        self._cut()

    @final
    def health(self) -> Health:
        """Read the boards' settings back.  Raises BusError, NotOpenError."""
        if not self._is_open:
            raise NotOpenError("the driver is not open: call open() first")
        return self._health()

    @final
    def close(self) -> None:
        """End every pulse and let go of the devices; may be called twice."""
        if self._is_open:
            self._is_open = False
            self._close()

    def survey(self) -> tuple[Sight, ...]:
        """Look at every board without `open`: only read, change nothing; none by default.

        What is wrong with a board is in its sight.  Raises MissingLibraryError.
        """
        return ()

    def notes(self) -> tuple[str, ...]:
        """Where the boards are, a line each, for the release helper (see `board_notes`); none by default."""
        return ()

    def _refuse(self, pulses_us: Pulses) -> None:
        for pulse, output in zip(pulses_us, self.outputs, strict=True):
            if pulse is not None and not output.min_us <= pulse <= output.max_us:
                kind = "not a number" if math.isnan(pulse) else f"{pulse:.1f} us"
                raise PulseError(
                    f"board {output.board} channel {output.channel}: pulse is {kind}, allowed "
                    f"{output.min_us:.0f} to {output.max_us:.0f} us; nothing was sent"
                )

    def _cut(self) -> None:  # noqa: B027 -- most boards have nothing but their bus
        """Must not touch a bus, nor wait for another call; nothing by default."""

    @abstractmethod
    def _open(self) -> None: ...

    @abstractmethod
    def _write(self, pulses_us: Pulses) -> None: ...

    @abstractmethod
    def _release(self) -> None: ...

    @abstractmethod
    def _health(self) -> Health: ...

    @abstractmethod
    def _close(self) -> None: ...
