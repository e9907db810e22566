"""The driver on the bench: one joint at a time, slowly, and no pulse is left whatever happens; us, s."""

from __future__ import annotations

import errno
from dataclasses import replace

import pytest

from hobnail.errors import DriverUnavailableError
from hobnail.service.drivers import make_driver
from hobnail.workshop.calibrate.bench import JointBench, with_limits_of_both
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import Driver, Health, Pulses
from hobnail_drivers.errors import BusError
from robots import juniper
from workshop.technician import BenchRobot

ROLL, HIP = "left-front.roll", "left-front.hip"


class Failing(Driver):
    """Fails where it is told to; keeps what it was told."""

    fails: tuple[str, ...] = ()
    releases_to_fail = 0
    kept = True

    def __init__(self, *arguments: object, **named: object) -> None:
        super().__init__(*arguments, **named)  # type: ignore[arg-type]
        self.pulses: Pulses = ()
        self.told: list[str] = []

    def _do(self, what: str) -> None:
        self.told.append(what)
        if what in self.fails:
            raise BusError(errno.EREMOTEIO, "no answer", "main")

    def _open(self) -> None:
        self._do("open")

    def _write(self, pulses_us: Pulses) -> None:
        self._do("write")
        self.pulses = tuple(pulses_us)

    def _release(self) -> None:
        if self.releases_to_fail:
            self.releases_to_fail -= 1
            raise BusError(errno.EREMOTEIO, "no answer", "main")
        self._do("release")
        self.pulses = ()

    def _health(self) -> Health:
        return Health(settings_kept=self.kept, detail="" if self.kept else "board main: a brown-out")

    def _close(self) -> None:
        self._do("close")


def failing() -> tuple[Failing, JointBench]:
    driver = make_driver(Failing, juniper())
    assert isinstance(driver, Failing)
    return driver, JointBench(driver, juniper(), sleep=lambda _: None)


def test_one_joint_has_the_pulse_and_the_one_before_loses_it() -> None:
    robot = BenchRobot(juniper(), {})
    with robot.bench() as bench:
        bench.wake(ROLL, 1500.0)
        assert robot.awake == [ROLL]
        bench.wake(HIP, 1400.0)
        assert robot.awake == [HIP]
        bench.sleep()
        assert robot.awake == []
        bench.wake(HIP, 1400.0)
    assert robot.awake == []


def test_a_move_takes_its_time() -> None:
    """90 deg at 20 deg a second; 2000 us are 270 deg."""
    robot = BenchRobot(juniper(), {})
    with robot.bench() as bench:
        bench.wake(ROLL, 1200.0)
        started_s = robot.time_s
        bench.move(1200.0 + 2000.0 / 3.0)
        assert robot.time_s - started_s == pytest.approx(4.5, abs=0.03)


def test_a_slow_servo_is_moved_slower_still() -> None:
    legs = []
    for leg in juniper().legs:
        roll, hip, knee = (replace(j, servo=replace(j.servo, speed_rad_s=1.0)) for j in leg.joints)
        legs.append(replace(leg, joints=(roll, hip, knee)))
    robot = BenchRobot(replace(juniper(), legs=tuple(legs)), {})
    with robot.bench() as bench:
        bench.wake(ROLL, 1400.0)
        started_s = robot.time_s
        bench.move(1400.0 + 2000.0 / 270.0 * 5.7296)  # a tenth of a radian at a tenth of 1 rad/s
        assert robot.time_s - started_s == pytest.approx(1.0, abs=0.03)


@pytest.mark.parametrize("what", ["open", "write"])
def test_a_driver_that_fails_is_told_and_nothing_pulses(what: str) -> None:
    driver, bench = failing()
    driver.fails = (what,)
    with pytest.raises(DriverUnavailableError, match="driver: board main: no answer"), bench:
        bench.wake(ROLL, 1500.0)
    assert all(pulse is None for pulse in driver.pulses)
    if what == "write":
        assert driver.told[-2:] == ["release", "close"]


def test_a_release_that_fails_is_tried_again() -> None:
    driver, bench = failing()
    with bench:
        bench.wake(ROLL, 1500.0)
        driver.releases_to_fail = 2
    assert driver.told[-2:] == ["release", "close"]
    assert driver.pulses == ()


def test_pulses_that_cannot_be_ended_are_told_with_what_to_do() -> None:
    driver, bench = failing()
    driver.fails = ("release",)
    with (
        pytest.raises(DriverUnavailableError, match=r"could not be ended. Switch the servo supply off"),
        bench,
    ):
        bench.wake(ROLL, 1500.0)
    assert driver.told[-1] == "close"


def test_a_brown_out_ends_the_session() -> None:
    driver, bench = failing()
    driver.kept = False
    with pytest.raises(DriverUnavailableError, match="a brown-out; what was kept stays kept"), bench:
        bench.wake(ROLL, 1500.0)
    assert driver.pulses == ()


@pytest.mark.parametrize("end", [KeyboardInterrupt, SystemExit, ValueError])
def test_however_it_is_left_the_pulses_end(end: type[BaseException]) -> None:
    driver, bench = failing()

    def leave() -> None:
        with bench:
            bench.wake(ROLL, 1500.0)
            raise end

    with pytest.raises(end):
        leave()
    assert driver.told[-2:] == ["release", "close"]


def test_an_interrupt_while_the_pulses_end_does_not_keep_them(monkeypatch: pytest.MonkeyPatch) -> None:
    driver, bench = failing()
    real = driver._release
    calls = []

    def interrupted() -> None:
        calls.append("release")
        if len(calls) == 1:
            raise KeyboardInterrupt
        real()

    monkeypatch.setattr(driver, "_release", interrupted)
    with pytest.raises(KeyboardInterrupt), bench:
        bench.wake(ROLL, 1500.0)
    assert driver.pulses == ()


def test_on_the_chip_model_one_channel_pulses_and_then_none() -> None:
    now = [0.0]

    def sleep(seconds: float) -> None:
        now[0] += seconds

    def kind(boards, outputs, *, argument=""):  # type: ignore[no-untyped-def]
        return ModelledPca9685Driver(boards, outputs, argument=argument, clock=lambda: now[0], sleep=sleep)

    driver = make_driver(kind, juniper())  # type: ignore[arg-type]
    assert isinstance(driver, ModelledPca9685Driver)
    with JointBench(driver, juniper(), sleep=sleep) as bench:
        bench.wake(HIP, 1400.0)
        bench.move(1450.0)
        sending = driver.chips["main"].sending_us()
        assert [k for k, pulse in enumerate(sending) if pulse is not None] == [1]
        assert sending[1] == pytest.approx(1450.0, abs=0.5)
        bench.sleep()
        assert driver.chips["main"].sending_us() == [None] * 16
        bench.wake(ROLL, 1500.0)
    assert driver.chips["main"].is_full_off()


def test_limits_are_measured_anew_within_the_wider_of_both() -> None:
    roll, hip, knee = juniper().legs[0].joints
    narrow = replace(roll, pulse_limits_us=(700.0, 2500.0))
    legs = (replace(juniper().legs[0], joints=(narrow, hip, knee)), *juniper().legs[1:])
    both = with_limits_of_both(replace(juniper(), legs=legs), juniper())
    assert both.joints[0].pulse_limits_us == (550.0, 2500.0)
    assert both.joints[1:] == juniper().joints[1:]
