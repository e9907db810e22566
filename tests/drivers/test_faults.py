"""The fault injector does what it was told, at the transfer it was told."""

from __future__ import annotations

import errno
from collections.abc import Callable

import pytest

from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.conformance import BOARDS, OUTPUTS, PULSES_US, ManualClock
from hobnail_drivers.errors import BusError
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.pca9685_chip import Chip
from hobnail_drivers.simulated import SimulatedDriver


def test_only_the_chosen_transfers_of_a_driver_fail() -> None:
    plan = FaultInjector()
    driver = plan.driver(SimulatedDriver(BOARDS, OUTPUTS))
    plan.fail(3, errno.EREMOTEIO, count=2)
    driver.open()
    driver.write(PULSES_US)
    for _ in range(2):
        with pytest.raises(BusError, match="address pins") as caught:
            driver.write(PULSES_US)
        assert caught.value.errno == 121
    driver.write(PULSES_US)
    assert plan.transfers == 5
    assert plan.injected == 2


def test_a_failed_transfer_does_not_reach_the_driver_behind() -> None:
    plan = FaultInjector()
    inner = SimulatedDriver(BOARDS, OUTPUTS)
    driver = plan.driver(inner)
    driver.open()
    driver.write(PULSES_US)
    before = inner.pulses_us
    plan.fail_next(errno.EIO, count=None)
    for call in (driver.release, lambda: driver.write([600.0] * len(OUTPUTS)), driver.health):
        with pytest.raises(BusError):
            call()
    assert inner.pulses_us == before
    with pytest.raises(BusError):
        driver.close()
    assert set(inner.pulses_us) == {None}  # closed all the same


def test_a_hook_may_let_time_pass_and_the_transfer_goes_on() -> None:
    clock = ManualClock(0.0)
    plan = FaultInjector()
    inner = SimulatedDriver(BOARDS, OUTPUTS, clock=clock)
    driver = plan.driver(inner)
    driver.open()
    plan.call_next(lambda: clock.sleep(1.0))
    driver.write(PULSES_US)
    driver.write(PULSES_US)
    assert clock.now_s == 1.0
    assert inner.transitions[-1].time_s == 1.0


def test_every_call_of_a_bus_counts_as_one_transfer() -> None:
    plan = FaultInjector()
    bus = plan.bus(BusModel([Chip(0x40, clock=ManualClock())]))
    calls: list[Callable[[], object]] = [
        lambda: bus.read_byte(0x40),
        lambda: bus.write_byte_data(0x40, 0, 0x31),
        lambda: bus.read_i2c_block_data(0x40, 0, 2),
        lambda: bus.write_i2c_block_data(0x40, 6, [1, 2]),
    ]
    for number, call in enumerate(calls, start=1):
        call()
        assert plan.transfers == number
    plan.fail_next(errno.ETIMEDOUT, count=None)
    for call in [*calls, bus.i2c_rdwr]:
        with pytest.raises(OSError, match="timed out") as caught:
            call()
        assert caught.value.errno == 110
    plan.clear()
    calls[0]()
    bus.close()
