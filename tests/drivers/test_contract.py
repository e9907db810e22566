"""The one contract suite over every back end."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import pytest

from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.conformance import NONE, PULSES_US, DriverContract, ManualClock
from hobnail_drivers.contract import BoardSettings, Driver, Output
from hobnail_drivers.faults import FaultInjector, FaultyDriver
from hobnail_drivers.simulated import SimulatedDriver


@pytest.fixture(autouse=True)
def quick_library(monkeypatch: pytest.MonkeyPatch) -> None:
    """The chip library sleeps for 5 ms by `time.sleep`, which no test of the contract needs to wait for."""
    monkeypatch.setattr("time.sleep", lambda _: None)


def chip_pulses_us(driver: ModelledPca9685Driver) -> list[float | None]:
    widths = {name: chip.sending_us() for name, chip in driver.chips.items()}
    return [widths[output.board][output.channel] for output in driver.outputs]


class TestSimulated(DriverContract):
    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        return SimulatedDriver(boards, outputs, clock=ManualClock())

    def sending_us(self, driver: Driver) -> Sequence[float | None]:
        assert isinstance(driver, SimulatedDriver)
        return driver.pulses_us


class TestModelledWithPlainI2c(DriverContract):
    plain_i2c = True

    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        clock = ManualClock()
        return ModelledPca9685Driver(
            boards, outputs, clock=clock, sleep=clock.sleep, plain_i2c=self.plain_i2c
        )

    def sending_us(self, driver: Driver) -> Sequence[float | None]:
        assert isinstance(driver, ModelledPca9685Driver)
        return chip_pulses_us(driver)


class TestModelledWithSmbusOnly(TestModelledWithPlainI2c):
    plain_i2c = False


class TestModelledWithOutputEnable(TestModelledWithPlainI2c):
    """/OE of all boards on one line."""

    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        return super().make([replace(board, output_enable=("gpiochip0", 17)) for board in boards], outputs)

    def test_from_a_cut_on_nothing_is_sent_until_release_or_open(self) -> None:
        driver = self.opened()
        for allow in (driver.release, driver.open):
            driver.write(PULSES_US)
            driver.cut()
            self.assert_sends(driver, NONE)
            driver.write(PULSES_US)
            self.assert_sends(driver, NONE)
            allow()
            self.assert_sends(driver, NONE)
            driver.write(PULSES_US)
            self.assert_sends(driver, PULSES_US)
            driver.release()
            driver.cut()
            driver.write(PULSES_US)  # the first one, which would enable the outputs
            self.assert_sends(driver, NONE)
            allow()


class TestModelledInAFile(TestModelledWithPlainI2c):
    @pytest.fixture(autouse=True)
    def chip_file(self, tmp_path_factory: pytest.TempPathFactory) -> None:
        self.path = str(tmp_path_factory.mktemp("chips") / "chips")

    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        return ModelledPca9685Driver(boards, outputs, argument=self.path)


class TestInjectedDriver(DriverContract):
    """Behind a fault injector that has no faults planned."""

    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        return FaultInjector().driver(SimulatedDriver(boards, outputs))

    def sending_us(self, driver: Driver) -> Sequence[float | None]:
        assert isinstance(driver, FaultyDriver)
        assert isinstance(driver.inner, SimulatedDriver)
        return driver.inner.pulses_us


class TestInjectedBus(TestModelledWithPlainI2c):
    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        return ModelledPca9685Driver(boards, outputs, wrap_bus=FaultInjector().bus)
