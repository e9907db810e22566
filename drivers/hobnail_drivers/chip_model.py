"""The real PCA9685 driver over modelled chips: no hardware, but every byte as on the wire.

`chip-model` keeps the chips in the process; `chip-model:PATH` keeps their
registers in a file that outlives it, as the registers of real chips would.
See `pca9685_chip` and `bus_model` for what is not modelled.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence

from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.chip_file import make_chip_file, open_chip_file
from hobnail_drivers.contract import BoardSettings, Output
from hobnail_drivers.errors import SettingsError
from hobnail_drivers.gpio import OutputLine
from hobnail_drivers.i2c import SmBus
from hobnail_drivers.pca9685 import Pca9685Driver
from hobnail_drivers.pca9685_chip import Chip


class ModelledOutputLine(OutputLine):
    """The /OE pins of modelled chips, pulled low when let go of."""

    def __init__(self, chips: Sequence[Chip]) -> None:
        self._chips = chips
        self.set(True)

    def set(self, high: bool) -> None:
        for chip in self._chips:
            chip.enable(not high)

    def close(self) -> None:
        self.set(False)


class ModelledPca9685Driver(Pca9685Driver):
    """`chips` by board name and `buses` by number are there to look at and to break.

    `plain_i2c` False: the adapters know SMBus calls only.  `wrap_bus` comes
    between driver and buses, to inject faults.
    """

    takes_argument = True
    is_model = True

    def __init__(
        self,
        boards: Sequence[BoardSettings],
        outputs: Sequence[Output],
        *,
        argument: str = "",
        clock: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
        plain_i2c: bool = True,
        wrap_bus: Callable[[SmBus], SmBus] = lambda bus: bus,
    ) -> None:
        """`argument` is the path of a chip file, made when missing; empty for none.

        Raises SettingsError, also when the file cannot be used.
        """
        self._wrap_bus = wrap_bus
        self.chips: dict[str, Chip] = {}
        self.buses: dict[int, BusModel] = {}
        super().__init__(
            boards, outputs, argument=argument, open_bus=self._bus, open_line=self._line, sleep=sleep
        )
        registers: dict[str, memoryview] = {}
        if argument:
            try:
                make_chip_file(argument, [(b.name, b.bus, b.address, b.oscillator_hz) for b in self.boards])
                registers = {entry.name: entry.registers for entry in open_chip_file(argument)}
            except OSError as error:
                raise SettingsError(f"chip model file {argument}: {error.strerror}") from error
        for board in self.boards:
            chip = Chip(
                board.address,
                oscillator_hz=board.oscillator_hz,
                clock=clock,
                registers=registers.get(board.name),
            )
            self.chips[board.name] = chip
            if board.bus not in self.buses:
                self.buses[board.bus] = BusModel([], plain_i2c=plain_i2c)
                self.buses[board.bus].close()
            self.buses[board.bus].devices.append(chip)

    def notes(self) -> tuple[str, ...]:
        if not self.argument:
            return ()
        return tuple(f"model {self.argument} {board.name}" for board in self.boards)

    def _bus(self, number: int) -> SmBus:
        self.buses[number].open()
        return self._wrap_bus(self.buses[number])

    def _line(self, chip: str, line: int) -> OutputLine:
        return ModelledOutputLine(
            [self.chips[board.name] for board in self.boards if board.output_enable == (chip, line)]
        )
