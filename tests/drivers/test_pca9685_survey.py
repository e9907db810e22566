"""Boards looked at without driving them, over the chip model: nothing is written, nothing ends or begins."""

from __future__ import annotations

import errno
from typing import Any

import pytest

from hobnail_drivers import registers as r
from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import BoardSettings, Output, Sight
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.simulated import SimulatedDriver

BOARDS = (
    BoardSettings(name="main", bus=1, address=0x40, frame_hz=100.0),
    BoardSettings(name="spare", bus=2, address=0x41, frame_hz=50.0),
)
OUTPUTS = tuple(Output(board="main", channel=channel, min_us=900.0, max_us=2100.0) for channel in range(3))


def driver(**settings: Any) -> ModelledPca9685Driver:
    return ModelledPca9685Driver(BOARDS, OUTPUTS, **settings)


@pytest.mark.parametrize("plain_i2c", [True, False])
def test_chips_that_just_got_power_answer_asleep(plain_i2c: bool) -> None:
    made = driver(plain_i2c=plain_i2c)
    main, spare = made.survey()
    assert (main.board, spare.board) == ("main", "spare")
    assert main.found.startswith("bus 1 address 0x40: answers, asleep, no pulses")
    assert main.problem == ""
    assert ("plain I2C" in main.found) == plain_i2c


def test_nothing_is_changed_by_looking() -> None:
    made = driver()
    made.open()
    made.write([1500.0, None, 1200.0])
    before = {name: bytes(chip.registers) for name, chip in made.chips.items()}
    sights = made.survey()
    assert {name: bytes(chip.registers) for name, chip in made.chips.items()} == before
    # Nor is a byte written beyond the register that is to be read.
    for bus in made.buses.values():
        *_, last = bus.log
        written = [message for message in last if not message.is_read]
        assert [len(message.data) for message in written] == [1]
    assert sights[0].pulsing
    made.write([1500.0, 1500.0, 1200.0])


def test_outputs_that_pulse_are_told_and_how_to_end_them() -> None:
    made = driver()
    made.open()
    made.write([1500.0, None, 1200.0])
    main, spare = made.survey()
    assert "answers, 100.4 Hz, 2 outputs pulse" in main.found or "2 outputs pulse" in main.found
    assert main.problem.startswith("2 outputs send pulses")
    assert "hobnail-release" in main.next
    assert (spare.problem, spare.pulsing) == ("", False)
    assert "no outputs pulse" in spare.found


def test_a_board_that_does_not_answer_does_not_hide_the_other() -> None:
    made = driver()
    made.buses[1].devices.clear()
    main, spare = made.survey()
    assert main.problem == "reading failed: Remote I/O error (errno 121)"
    assert main.next.startswith("check that the board has power")
    assert spare.problem == ""
    assert all(bus.handles == 0 for bus in made.buses.values())


def test_a_bus_that_is_not_there_says_so() -> None:
    def none(_number: int) -> BusModel:
        raise OSError(errno.ENOENT, "No such file or directory")

    made = driver()
    made._open_bus = none
    assert {sight.problem for sight in made.survey()} == {
        "opening the bus failed: No such file or directory (errno 2)"
    }


def test_an_adapter_that_cannot_carry_frames_is_told() -> None:
    made = driver()
    made.buses[1].funcs = 0
    main, _ = made.survey()
    assert "neither plain I2C nor SMBus blocks" in main.problem


def test_another_chip_is_not_taken_for_one() -> None:
    made = driver()
    made.chips["main"].registers[r.MODE2] = 0xFF
    main, _ = made.survey()
    assert main.problem.startswith("it is no PCA9685: MODE2 reads 0xff")


def test_a_driver_that_cannot_look_says_nothing() -> None:
    assert SimulatedDriver(BOARDS, OUTPUTS).survey() == ()
    assert Sight(board="x", found="y").problem == ""
    assert FaultInjector().injected == 0
