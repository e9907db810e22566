"""The PCA9685 driver: servos on one or more boards over Linux I2C, pulses in us.

One bus transaction a board a frame.  Never puts a board to sleep while it
pulses, and never changes its frame rate but in `open`.  Where a board's /OE is
wired to a GPIO line, `cut` drives that high at once, also while another thread
hangs in a transfer, and `release` once the pulses under way have ended.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Sequence
from contextlib import suppress

from hobnail_drivers.contract import BoardSettings, Driver, Health, Output, Pulses, Sight
from hobnail_drivers.errors import BusError, DriverError, SetupError
from hobnail_drivers.gpio import GpiodOutputLine, OpenLine, OutputLine
from hobnail_drivers.i2c import OpenBus, SmBus, open_bus
from hobnail_drivers.pca9685_board import Board
from hobnail_drivers.pca9685_survey import survey


class Pca9685Driver(Driver):
    """Servos on PCA9685 boards.

    A failed `open` or `release` leaves it unsure whether pulses have ended;
    `write` then raises SetupError until `open` has verified every board again.
    """

    def __init__(
        self,
        boards: Sequence[BoardSettings],
        outputs: Sequence[Output],
        *,
        argument: str = "",
        open_bus: OpenBus = open_bus,
        open_line: OpenLine = GpiodOutputLine,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        """`open_bus` takes a bus number, `open_line` a GPIO chip and line; raises as `Board` does."""
        super().__init__(boards, outputs, argument=argument)
        self._open_bus = open_bus
        self._open_line = open_line
        self._sleep = sleep
        self._wired = [Board(board, self.outputs) for board in self.boards]
        self._buses: dict[int, SmBus] = {}
        self._lines: dict[tuple[str, int], OutputLine] = {}  # /OE; boards may share one
        self._lines_lock = threading.Lock()  # for the lines and what keeps them high; never during a transfer
        self._is_held = False  # /OE lines stay high until a release or open that begins after `cut`
        self._is_cut = True  # every output was ended; /OE lines are high
        self._is_unsure = True  # some board may still pulse

    @property
    def frame_hz(self) -> dict[str, float]:
        """The true frame rate of each board, Hz."""
        return {board.settings.name: board.frame_hz for board in self._wired}

    def survey(self) -> tuple[Sight, ...]:
        return survey(self._wired, self._open_bus)

    def notes(self) -> tuple[str, ...]:
        return tuple(f"i2c {board.bus} 0x{board.address:02x}" for board in self.boards)

    def _open(self) -> None:
        self._is_cut = self._is_unsure = True
        self._is_held = False
        try:
            self._connect()
            for board in self._wired:
                try:
                    board.set_up(self._sleep)
                except OSError as error:
                    raise board.error(error, "setting up") from error
                except ValueError as error:  # the library's word for "no answer"
                    raise SetupError(f"board {board.settings.name}: {error}") from error
            self._is_unsure = False
            self._uncut()
        except DriverError:
            # One board may be missing and another still pulse since a crash.
            with suppress(DriverError):
                self._release()
            self._is_unsure = True
            if not self._is_open:
                self._let_go()
            raise

    def _write(self, pulses_us: Pulses) -> None:
        if self._is_cut:
            self._uncut()
        for board in self._wired:
            try:
                board.write(pulses_us)
            except OSError as error:
                raise board.error(error, "writing pulses") from error

    def _release(self) -> None:
        was_cut, self._is_cut = self._is_cut, True
        self._is_held = False  # before anything else: a `cut` from now on holds the lines
        errors: list[BusError] = []
        for board in self._wired:
            try:
                board.end_pulses()
            except OSError as error:
                errors.append(board.error(error, "ending pulses"))
                errors[-1].__cause__ = error
        if self._lines:
            if not errors and not was_cut:  # else the lines would cut the pulses under way
                self._sleep(1.0 / min(self.frame_hz.values()))
            errors += self._drive_lines(high=True)
        self._is_unsure = bool(errors)
        if errors:
            raise errors[0]

    def _cut(self) -> None:
        self._is_held = True
        if errors := self._drive_lines(high=True):
            raise errors[0]

    def _health(self) -> Health:
        lost = []
        for board in self._wired:
            try:
                differences = board.differences()
            except OSError as error:
                raise board.error(error, "reading settings back") from error
            if differences:
                lost.append(f"board {board.settings.name}: {differences}")
        detail = f"{'; '.join(lost)}: check the boards' supply for brown-outs" if lost else ""
        return Health(settings_kept=not lost, detail=detail, frame_hz=self.frame_hz)

    def _close(self) -> None:
        try:
            self._release()
        finally:
            self._let_go()

    def _connect(self) -> None:
        """Cut every line, then open every bus afresh; what was open stays until its successor is there."""
        fresh: dict[int, SmBus] = {}
        for board in self._wired:
            where = board.settings.output_enable
            if where is not None and where not in self._lines:
                line = self._open_line(*where)
                with self._lines_lock:
                    self._lines[where] = line
        if errors := self._drive_lines(high=True):
            raise errors[0]
        for board in self._wired:
            number = board.settings.bus
            if number not in fresh:
                try:
                    fresh[number] = self._open_bus(number)
                except OSError as error:
                    raise board.error(error, "opening the bus") from error
                if number in self._buses:
                    self._buses[number].close()
                self._buses[number] = fresh[number]
            board.connect(fresh[number])

    def _drive_lines(self, *, high: bool) -> list[BusError]:
        """Try each line, and give the errors.  Lines that are held stay high."""
        errors = []
        with self._lines_lock:
            for line in self._lines.values():
                try:
                    line.set(high or self._is_held)
                except BusError as error:
                    errors.append(error)
        return errors

    def _uncut(self) -> None:
        """Let the /OE lines through again; every output behind them is full off."""
        if self._is_unsure:
            raise SetupError("a board may still pulse since the last failure: call open() first")
        if errors := self._drive_lines(high=False):
            raise errors[0]
        self._is_cut = False

    def _let_go(self) -> None:
        with self._lines_lock:
            for line in self._lines.values():
                line.close()
            self._lines.clear()
        for bus in self._buses.values():
            bus.close()
        self._buses.clear()
