"""PCA9685 boards looked at and left as they are: who answers, and whether anything pulses.

Only reads registers, one at a time: a chip that has just got power does not
increment.  Beside a program that drives the boards this is harmless, but takes
its time on the bus.
"""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress

from hobnail_drivers import registers as r
from hobnail_drivers.contract import Sight
from hobnail_drivers.errors import SetupError
from hobnail_drivers.i2c import OpenBus, RegisterBus
from hobnail_drivers.libraries import load_pwm_chip
from hobnail_drivers.pca9685_board import Board

MODE2_UNUSED = 0xE0  # bits that always read 0 (data sheet, table 6), as in LEDn_OFF_H (table 7)
END_PULSES = "run `hobnail-release`, or cut the servo supply"


def survey(boards: Sequence[Board], open_bus: OpenBus) -> tuple[Sight, ...]:
    """Every board, each for itself.  Raises MissingLibraryError."""
    load_pwm_chip()
    return tuple(_look(board, open_bus) for board in boards)


def _look(board: Board, open_bus: OpenBus) -> Sight:
    settings = board.settings
    where = f"bus {settings.bus} address 0x{settings.address:02x}"
    try:
        opened = open_bus(settings.bus)
    except OSError as error:
        return _failed(board, where, error, "opening the bus")
    try:
        return _read(board, where, RegisterBus(opened))
    except SetupError as error:
        return Sight(board=settings.name, found=where, problem=str(error), next="use another bus")
    except OSError as error:
        return _failed(board, where, error, "reading")
    finally:
        with suppress(OSError):
            opened.close()


def _read(board: Board, where: str, bus: RegisterBus) -> Sight:
    name, address = board.settings.name, board.settings.address

    def register(number: int) -> int:
        return bus.read(address, number, 1)[0]

    mode1, mode2, pre_scale = register(r.MODE1), register(r.MODE2), register(r.PRE_SCALE)
    ends = [register(r.led_on_l(channel) + 3) for channel in range(r.CHANNELS)]
    adapter = "plain I2C" if bus.has_plain_i2c else "SMBus blocks only: frames take more transfers"
    if pre_scale < r.MIN_PRE_SCALE or any(value & MODE2_UNUSED for value in (mode2, *ends)):
        return Sight(
            board=name,
            found=f"{where}: something answers",
            problem=f"it is no PCA9685: MODE2 reads 0x{mode2:02x}, PRE_SCALE 0x{pre_scale:02x}",
            next="check the address pins, and what else is on the bus",
        )
    if mode1 & r.SLEEP:
        return Sight(board=name, found=f"{where}: answers, asleep, no pulses; {adapter}")
    frame_hz = r.true_frame_hz(board.settings.oscillator_hz, pre_scale)
    pulsing = sum(not value & r.FULL for value in ends)
    found = f"{where}: answers, {frame_hz:.1f} Hz, {pulsing or 'no'} outputs pulse; {adapter}"
    if not pulsing:
        return Sight(board=name, found=found)
    problem = f"{pulsing} outputs send pulses, and no service says that it drives them"
    return Sight(board=name, found=found, problem=problem, next=END_PULSES, pulsing=True)


def _failed(board: Board, where: str, error: OSError, doing: str) -> Sight:
    told = board.error(error, doing)
    _, _, advice = (told.strerror or str(error)).partition(": ")
    return Sight(
        board=board.settings.name,
        found=where,
        problem=f"{doing} failed: {error.strerror or error} (errno {told.errno})",
        next=advice.partition(": ")[2] or advice,
    )
