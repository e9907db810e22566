"""The INA219 on its register model; register layout by TI SBOS448 (memory)."""

from __future__ import annotations

import errno

import pytest

from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.conformance import ManualClock
from hobnail_drivers.errors import BusError, NotOpenError, SetupError
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.pca9685_chip import Chip
from hobnail_drivers.supply import Ina219, Ina219Model, SimulatedSupply


def monitor(model: Ina219Model, *, plain_i2c: bool = True) -> tuple[Ina219, BusModel]:
    bus = BusModel([model], plain_i2c=plain_i2c)
    return Ina219(1, model.address, open_bus=lambda _: bus, sleep=ManualClock().sleep), bus


@pytest.mark.parametrize("plain_i2c", [True, False])
@pytest.mark.parametrize("volts", [0.0, 0.004, 6.0, 7.4, 8.4, 26.0])
def test_volts_to_4_mv(volts: float, plain_i2c: bool) -> None:
    supply, _ = monitor(Ina219Model(volts=volts), plain_i2c=plain_i2c)
    assert supply.volts() == pytest.approx(volts, abs=0.0021)


def test_bus_voltage_register_holds_4_mv_steps_above_three_flag_bits() -> None:
    """12 V: 3000 steps, 0x0BB8 << 3 = 0x5DC0, with CNVR set (SBOS448, bus voltage register; memory)."""
    bus = BusModel([Ina219Model(volts=12.0)])
    assert bus.read_i2c_block_data(0x41, 0x02, 2) == [0x5D, 0xC2]


def test_power_up_configuration_is_0x399f() -> None:
    """SBOS448, configuration register (memory)."""
    assert BusModel([Ina219Model()]).read_i2c_block_data(0x41, 0x00, 2) == [0x39, 0x9F]


def test_reset_bit_and_calibration_register_of_the_model() -> None:
    model = Ina219Model()
    bus = BusModel([model])
    bus.write_i2c_block_data(0x41, 0x00, [0x01, 0x00])
    bus.write_i2c_block_data(0x41, 0x05, [0x10, 0x01])
    assert bus.read_i2c_block_data(0x41, 0x05, 2) == [0x10, 0x00]  # bit 0 is always 0
    bus.write_i2c_block_data(0x41, 0x00, [0x80, 0x00])
    assert model.configuration == 0x399F
    assert model.calibration == 0


def test_another_programs_settings_are_put_right() -> None:
    model = Ina219Model(volts=7.4)
    model.configuration = 0x0000  # powered down
    supply, _ = monitor(model)
    assert model.configuration == 0x399F
    assert supply.volts() == pytest.approx(7.4, abs=0.002)


def test_a_brown_out_of_the_monitor_changes_nothing() -> None:
    model = Ina219Model(volts=7.4)
    supply, _ = monitor(model)
    model.reset()
    assert supply.volts() == pytest.approx(7.4, abs=0.002)


def test_no_measurement_is_told_and_not_taken_for_0_volts() -> None:
    model = Ina219Model(volts=7.4)
    supply, _ = monitor(model)
    model.is_ready = False
    with pytest.raises(SetupError, match="no measurement"):
        supply.volts()


def test_something_else_at_the_address_is_refused_and_the_bus_let_go() -> None:
    bus = BusModel([Chip(0x41, clock=ManualClock())])
    with pytest.raises(SetupError, match="is it an INA219"):
        Ina219(1, 0x41, open_bus=lambda _: bus)
    assert bus.handles == 0


def test_errors_carry_errno_and_advice() -> None:
    plan = FaultInjector()
    bus = BusModel([Ina219Model(volts=7.4)])
    supply = Ina219(1, open_bus=lambda _: plan.bus(bus))
    plan.fail_next(errno.EREMOTEIO)
    with pytest.raises(BusError, match=r"supply monitor INA219.*0x41 on bus 1.*power") as caught:
        supply.volts()
    assert caught.value.errno == 121
    supply.close()
    supply.close()
    assert bus.handles == 0
    with pytest.raises(NotOpenError):
        supply.volts()


def test_a_missing_bus_is_told() -> None:
    with pytest.raises(BusError, match="no such bus"):
        Ina219(99)


def test_a_simulated_supply_has_the_voltage_it_is_told() -> None:
    supply = SimulatedSupply(7.4)
    supply.now_v = 6.1
    assert supply.volts() == 6.1
