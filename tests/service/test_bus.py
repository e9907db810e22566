"""The bus thread: a real thread, transfers that fail or hang on an Event; no sleeps, an injected clock."""

from __future__ import annotations

import errno
from collections.abc import Callable, Iterator
from dataclasses import replace
from functools import partial
from threading import Event

import pytest

from hobnail.service.bus import Bus
from hobnail.service.drivers import make_driver
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import Health, Pulses
from hobnail_drivers.errors import BusError
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.simulated import SimulatedDriver
from hobnail_drivers.supply import SimulatedSupply, SupplyMonitor
from robots import bramble, juniper

WAIT_S = 10.0  # a bound for a broken test, not a time that anything takes
FRAME: Pulses = (1500.0,) * 12
OTHER: Pulses = (1510.0,) * 12


class Rig:
    """A bus over a simulated driver behind a fault injector."""

    def __init__(self, retries: int = 3, monitor: SupplyMonitor | None = None) -> None:
        self.now_s = 0.0
        self.plan = FaultInjector()
        self.inner = make_driver(SimulatedDriver, juniper())
        self.bus = Bus(
            self.plan.driver(self.inner), retries=retries, monitor=monitor, clock=lambda: self.now_s
        )
        self.bus.start()
        self.bus.set_up()
        self.done()

    @property
    def pulses(self) -> Pulses:
        assert isinstance(self.inner, SimulatedDriver)
        return self.inner.pulses_us

    def done(self) -> None:
        assert self.bus.wait(WAIT_S)

    def send(self, pulses: Pulses = FRAME) -> None:
        self.bus.submit(pulses)
        self.done()

    def faults(self) -> list[str]:
        return [event.fault for event in self.bus.events()]


@pytest.fixture
def make() -> Iterator[Callable[..., Rig]]:
    made: list[Rig] = []

    def build(**settings: object) -> Rig:
        made.append(Rig(**settings))  # type: ignore[arg-type]
        return made[-1]

    yield build
    for rig in made:
        rig.plan.clear()
        rig.bus.close(WAIT_S)


@pytest.fixture
def rig(make: Callable[..., Rig]) -> Rig:
    return make()


class Hang:
    """A transfer that hangs until it is let go."""

    def __init__(self) -> None:
        self.begun = Event()
        self.let_go = Event()

    def __call__(self) -> None:
        self.begun.set()
        assert self.let_go.wait(WAIT_S)


def test_frames_reach_the_driver(rig: Rig) -> None:
    assert rig.bus.released
    rig.send()
    assert rig.bus.frames == 1
    assert not rig.bus.released
    assert rig.pulses == pytest.approx(FRAME, abs=1.3)  # half a count of the simulated chip
    rig.bus.release()
    rig.done()
    assert rig.bus.released
    assert rig.pulses == (None,) * 12
    assert rig.faults() == []


def test_nothing_is_sent_before_the_boards_are_set_up() -> None:
    driver = make_driver(SimulatedDriver, juniper())
    bus = Bus(driver, retries=0)
    bus.start()
    bus.submit(FRAME)
    assert bus.wait(WAIT_S)
    assert bus.frames == 0
    assert bus.close(WAIT_S)


# Hazards: 121 is an address or power, 110 a wedged bus.
@pytest.mark.parametrize("number", [errno.EREMOTEIO, errno.ETIMEDOUT, errno.EIO])
def test_a_few_failures_are_retried_and_told(rig: Rig, number: int) -> None:
    rig.plan.fail_next(number, count=3)
    rig.send()
    assert rig.bus.frames == 1
    assert rig.faults() == ["bus-retried"] * 3


@pytest.mark.parametrize(
    ("number", "word"), [(errno.EREMOTEIO, "address"), (errno.ETIMEDOUT, "wedged"), (errno.EACCES, "i2c")]
)
def test_one_failure_more_ends_the_frames_and_the_pulses(rig: Rig, number: int, word: str) -> None:
    rig.send()
    rig.plan.fail_next(number, count=4)
    rig.send(OTHER)
    events = rig.bus.events()
    assert [event.fault for event in events] == ["bus-retried"] * 3 + ["bus-error"]
    assert word in events[-1].detail
    assert rig.pulses == (None,) * 12
    assert rig.bus.released
    # Frames that come all the same are not sent: nothing resumes by itself.
    rig.send()
    assert rig.pulses == (None,) * 12
    assert not rig.bus.is_set_up


def test_set_up_again_only_when_asked_and_every_output_off(rig: Rig) -> None:
    rig.plan.fail_next(errno.EIO, count=4)
    rig.send()
    rig.bus.events()
    rig.bus.set_up()
    rig.done()
    assert rig.bus.is_set_up
    assert rig.pulses == (None,) * 12
    rig.send()
    assert rig.pulses == pytest.approx(FRAME, abs=1.3)
    assert rig.faults() == []


def test_a_set_up_that_fails_says_so_and_takes_no_frames(rig: Rig) -> None:
    rig.plan.fail_next(errno.EREMOTEIO, count=None)
    rig.bus.set_up()
    rig.done()
    assert not rig.bus.is_set_up
    assert isinstance(rig.bus.set_up_error, BusError)
    assert rig.faults() == ["bus-error"]


def test_a_release_that_fails_is_not_taken_for_done(rig: Rig) -> None:
    rig.send()
    rig.plan.fail_next(errno.ETIMEDOUT)
    rig.bus.release()
    rig.done()
    assert not rig.bus.released
    assert rig.faults() == ["bus-error"]
    rig.bus.release()
    rig.done()
    assert rig.bus.released


def test_after_a_release_that_failed_no_frame_is_sent_until_the_boards_are_set_up(rig: Rig) -> None:
    rig.send()
    rig.plan.fail_next(errno.ETIMEDOUT)
    rig.bus.release()
    rig.done()
    assert not rig.bus.is_set_up
    rig.bus.release()
    rig.send()
    assert rig.bus.frames == 1
    assert rig.pulses == (None,) * 12


def test_a_transfer_that_hangs_for_a_second_holds_up_nobody(rig: Rig) -> None:
    hang = Hang()
    rig.plan.call_next(hang)
    rig.bus.submit(FRAME)
    assert hang.begun.wait(WAIT_S)
    for _ in range(100):  # all of these return at once, while the transfer hangs
        rig.now_s += 0.01
        rig.bus.submit(OTHER)
        rig.bus.check()
        assert rig.bus.pending
    assert rig.bus.busy_since_s == 0.0
    rig.bus.release()
    hang.let_go.set()
    rig.done()
    # The release went before the frames that waited.
    assert rig.pulses == (None,) * 12
    assert rig.bus.frames == 1
    assert rig.bus.busy_since_s is None


def test_a_cut_drives_the_line_while_a_transfer_hangs_and_a_release_follows() -> None:
    robot = juniper()
    wired = replace(
        robot, boards=tuple(replace(board, output_enable=("gpiochip0", 17)) for board in robot.boards)
    )
    plan = FaultInjector()
    driver = make_driver(partial(ModelledPca9685Driver, wrap_bus=plan.bus), wired)  # type: ignore[arg-type]
    assert isinstance(driver, ModelledPca9685Driver)
    chips = driver.chips.values()
    bus, hang = Bus(driver, retries=3), Hang()
    bus.start()
    bus.set_up()
    assert bus.wait(WAIT_S)
    bus.submit(FRAME)
    assert bus.wait(WAIT_S)
    assert any(pulse is not None for chip in chips for pulse in chip.sending_us())
    plan.call_next(hang)
    bus.submit(OTHER)
    assert hang.begun.wait(WAIT_S)
    bus.cut()
    assert bus.busy_since_s is not None  # it hangs on
    assert all(pulse is None for chip in chips for pulse in chip.sending_us())
    assert not bus.released  # for the boards do not know yet
    assert not all(chip.is_full_off() for chip in chips)
    hang.let_go.set()
    assert bus.wait(WAIT_S)
    assert bus.released
    assert all(chip.is_full_off() for chip in chips)
    assert bus.events() == []
    bus.submit(FRAME)
    assert bus.wait(WAIT_S)
    assert any(pulse is not None for chip in chips for pulse in chip.sending_us())
    plan.call_next(hang := Hang())
    bus.submit(OTHER)
    assert hang.begun.wait(WAIT_S)
    assert not bus.close(0.01)  # at the end of the service likewise
    assert all(pulse is None for chip in chips for pulse in chip.sending_us())
    hang.let_go.set()
    assert bus.close(WAIT_S)


def test_a_line_that_cannot_cut_is_told_and_the_release_comes_all_the_same(
    rig: Rig, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken() -> None:
        raise BusError(errno.EIO, "gone", "gpiochip0 line 17", "GPIO")

    rig.send()
    monkeypatch.setattr(rig.inner, "_cut", broken)
    rig.bus.cut()
    rig.done()
    assert rig.bus.released
    assert rig.pulses == (None,) * 12
    (event,) = rig.bus.events()
    assert event.fault == "bus-error"
    assert "line 17" in event.detail


def test_frames_that_fail_are_cut_by_the_line_before_the_bus_is_tried_again(
    rig: Rig, monkeypatch: pytest.MonkeyPatch
) -> None:
    rig.send()
    calls: list[str] = []
    monkeypatch.setattr(rig.inner, "_cut", lambda: calls.append("cut"))
    rig.plan.fail_next(errno.EIO, count=4)
    rig.plan.call(rig.plan.transfers + 5, lambda: calls.append("transfer"))
    rig.send()
    assert calls == ["cut", "transfer"]


def test_the_newest_frame_wins(rig: Rig) -> None:
    hang = Hang()
    rig.plan.call_next(hang)
    rig.bus.submit(FRAME)
    assert hang.begun.wait(WAIT_S)
    for width in range(1501, 1600):
        rig.bus.submit((float(width),) * 12)
    hang.let_go.set()
    rig.done()
    assert rig.bus.frames == 2
    assert rig.pulses == pytest.approx((1599.0,) * 12, abs=1.3)


def test_a_release_ends_the_retries_of_a_frame(rig: Rig) -> None:
    hang = Hang()

    def fail_late() -> None:
        hang()
        raise OSError(errno.EIO, "late")

    rig.plan.call_next(fail_late)
    rig.bus.submit(FRAME)
    assert hang.begun.wait(WAIT_S)
    rig.bus.release()
    hang.let_go.set()
    rig.done()
    assert rig.bus.frames == 0
    assert rig.bus.released
    assert rig.faults() == ["bus-retried"]


def test_a_pulse_beyond_its_limits_cuts(rig: Rig) -> None:
    rig.send()
    rig.send((9999.0,) * 12)
    assert rig.faults() == ["internal"]
    assert rig.pulses == (None,) * 12


def test_settings_lost_is_found_by_read_back_and_pulses_end(
    rig: Rig, monkeypatch: pytest.MonkeyPatch
) -> None:
    rig.send()
    rig.bus.check()
    rig.done()
    assert rig.faults() == []
    monkeypatch.setattr(rig.inner, "_health", lambda: Health(settings_kept=False, detail="MODE1 is 0x11"))
    rig.bus.check()
    rig.done()
    assert rig.bus.events() == [("settings-lost", "MODE1 is 0x11")]
    assert rig.pulses == (None,) * 12


def test_power_on_reset_of_the_real_chip_model_is_found() -> None:
    driver = make_driver(ModelledPca9685Driver, bramble())
    assert isinstance(driver, ModelledPca9685Driver)
    bus = Bus(driver, retries=3)
    bus.start()
    bus.set_up()
    assert bus.wait(WAIT_S)
    bus.submit((1500.0,) * 18)
    bus.check()
    assert bus.wait(WAIT_S)
    assert bus.events() == []
    driver.chips[bramble().boards[1].name].reset()
    bus.check()
    assert bus.wait(WAIT_S)
    assert [event.fault for event in bus.events()] == ["settings-lost"]
    assert bus.released
    assert bus.close(WAIT_S)


def test_the_supply_is_read_and_a_monitor_that_fails_is_only_told(make: Callable[..., Rig]) -> None:
    supply = SimulatedSupply(5.7)
    rig = make(monitor=supply)
    rig.bus.check()
    rig.done()
    assert rig.bus.volts == 5.7

    class Broken(SimulatedSupply):
        def volts(self) -> float:
            raise BusError(errno.EREMOTEIO, "reading", "INA219")

    rig = make(monitor=Broken(0.0))
    rig.send()
    rig.bus.check()
    rig.done()
    assert rig.bus.volts is None
    assert rig.faults() == ["supply-unread"]
    assert not rig.bus.released


def test_close_releases_and_may_be_called_twice(rig: Rig) -> None:
    rig.send()
    assert rig.bus.close(WAIT_S)
    assert rig.pulses == (None,) * 12
    assert rig.bus.close(WAIT_S)


def test_close_does_not_wait_for_a_transfer_that_hangs(rig: Rig) -> None:
    hang = Hang()
    rig.plan.call_next(hang)
    rig.bus.submit(FRAME)
    assert hang.begun.wait(WAIT_S)
    assert not rig.bus.close(0.01)
    hang.let_go.set()
    assert rig.bus.close(WAIT_S)
    assert rig.pulses == (None,) * 12


@pytest.mark.parametrize("failing", ["release", "close"])
def test_closing_goes_on_when_a_part_of_it_fails(
    rig: Rig, failing: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    rig.send()
    called: list[str] = []

    def broken(name: str) -> Callable[[], None]:
        def call() -> None:
            called.append(name)
            if name == failing:
                raise RuntimeError("broken")

        return call

    for name in ("release", "close"):
        monkeypatch.setattr(rig.bus.driver, name, broken(name))
    assert rig.bus.close(WAIT_S)
    assert called == ["release", "close"]
