"""The contract of `Driver` as tests, for any back end, and a clock that passes only when told.

A package with a driver of its own runs them under pytest by subclassing:

    class TestMyDriver(DriverContract):
        def make(self, boards, outputs): return MyDriver(boards, outputs)
        def sending_us(self, driver): return driver.pulses_on_the_wire()
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Callable, Sequence

from hobnail_drivers.contract import BoardSettings, Driver, Output
from hobnail_drivers.errors import DriverError, NotOpenError, PulseError, SettingsError

BOARDS = (
    BoardSettings(name="fore", bus=1, address=0x40, frame_hz=50.0),
    BoardSettings(name="hind", bus=1, address=0x41, frame_hz=60.0),
)
# Two boards in turn, channels neither in order nor without gaps.
OUTPUTS = tuple(
    Output(board=board, channel=channel, min_us=600.0, max_us=2400.0)
    for channel in (9, 2, 3, 0, 15)
    for board in ("hind", "fore")
)
PULSES_US = tuple(700.0 + 170.3 * index for index in range(len(OUTPUTS)))
NONE = (None,) * len(OUTPUTS)


class ManualClock:
    """Monotonic seconds that pass only by `sleep`; hand both to what needs a clock and a sleep."""

    def __init__(self, now_s: float = 1000.0) -> None:
        self.now_s = now_s

    def __call__(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        """Let that time pass."""
        self.now_s += seconds


class DriverContract(ABC):
    """Subclass it as the module's first lines show; each `test_` method is one promise of the contract."""

    @abstractmethod
    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        """A driver that is not open yet."""

    @abstractmethod
    def sending_us(self, driver: Driver) -> Sequence[float | None]:
        """What each output's pin is being sent now, in the order of the outputs; None for no pulses."""

    def opened(self) -> Driver:
        """A driver with the outputs of this suite, opened."""
        driver = self.make(BOARDS, OUTPUTS)
        driver.open()
        return driver

    def assert_sends(self, driver: Driver, wanted_us: Sequence[float | None]) -> None:
        """Every output sends what is wanted, to half a count of a 12-bit frame."""
        got_us = self.sending_us(driver)
        assert len(got_us) == len(wanted_us), f"{len(got_us)} outputs, wanted {len(wanted_us)}"
        frame_hz = driver.health().frame_hz
        for output, got, wanted in zip(OUTPUTS, got_us, wanted_us, strict=True):
            where = f"board {output.board} channel {output.channel}: {got} us, wanted {wanted} us"
            assert (got is None) == (wanted is None), where
            if got is not None and wanted is not None:
                assert abs(got - wanted) <= 0.5e6 / (4096 * frame_hz[output.board]) + 1e-9, where

    def test_no_pulse_before_the_first_write(self) -> None:
        self.assert_sends(self.opened(), NONE)

    def test_each_output_gets_its_own_pulse(self) -> None:
        driver = self.opened()
        driver.write(PULSES_US)
        self.assert_sends(driver, PULSES_US)
        driver.write(PULSES_US[::-1])
        self.assert_sends(driver, PULSES_US[::-1])

    def test_none_is_no_signal_and_leaves_the_others_alone(self) -> None:
        driver = self.opened()
        some = [None if index % 3 else pulse_us for index, pulse_us in enumerate(PULSES_US)]
        driver.write(PULSES_US)
        driver.write(some)
        self.assert_sends(driver, some)

    def test_the_limits_themselves_are_allowed(self) -> None:
        driver = self.opened()
        for pulses_us in ([out.min_us for out in OUTPUTS], [out.max_us for out in OUTPUTS]):
            driver.write(pulses_us)
            self.assert_sends(driver, pulses_us)

    def test_a_refused_frame_sends_nothing(self) -> None:
        driver = self.opened()
        driver.write(PULSES_US)
        for wrong in (599.9, 2400.1, 0.0, -1500.0, math.nan, math.inf, -math.inf):
            for index in (0, len(OUTPUTS) - 1):
                pulses_us = list(reversed(PULSES_US))
                pulses_us[index] = wrong
                _assert_raises(PulseError, lambda pulses_us=pulses_us: driver.write(pulses_us))  # type: ignore[misc]
        _assert_raises(PulseError, lambda: driver.write(PULSES_US[:-1]))
        _assert_raises(PulseError, lambda: driver.write([*PULSES_US, 1500.0]))
        _assert_raises(PulseError, lambda: driver.write([]))
        self.assert_sends(driver, PULSES_US)

    def test_release_ends_every_pulse_and_writing_may_go_on(self) -> None:
        driver = self.opened()
        driver.write(PULSES_US)
        driver.release()
        self.assert_sends(driver, NONE)
        driver.release()
        driver.write(PULSES_US)
        self.assert_sends(driver, PULSES_US)

    def test_a_cut_may_come_at_any_time_and_release_lets_writing_go_on(self) -> None:
        driver = self.make(BOARDS, OUTPUTS)
        driver.cut()
        driver.open()
        self.assert_sends(driver, NONE)
        driver.write(PULSES_US)
        driver.cut()
        driver.cut()
        driver.release()
        self.assert_sends(driver, NONE)
        driver.write(PULSES_US)
        self.assert_sends(driver, PULSES_US)
        driver.close()
        driver.cut()
        driver.open()
        driver.write(PULSES_US)
        self.assert_sends(driver, PULSES_US)

    def test_opening_again_ends_every_pulse(self) -> None:
        driver = self.opened()
        driver.write(PULSES_US)
        driver.open()
        self.assert_sends(driver, NONE)
        driver.write(PULSES_US)
        self.assert_sends(driver, PULSES_US)

    def test_close_ends_every_pulse_and_may_be_called_twice(self) -> None:
        driver = self.opened()
        driver.write(PULSES_US)
        driver.close()
        assert tuple(self.sending_us(driver)) == NONE
        driver.close()
        driver.open()
        self.assert_sends(driver, NONE)
        driver.close()

    def test_unopened_it_refuses_all_but_close(self) -> None:
        driver = self.make(BOARDS, OUTPUTS)
        driver.close()
        for _ in range(2):
            for call in (lambda: driver.write(PULSES_US), driver.release, driver.health):
                _assert_raises(NotOpenError, call)
            driver.open()
            driver.close()

    def test_health_tells_the_true_frame_rate_of_each_board(self) -> None:
        health = self.opened().health()
        assert health.settings_kept, health.detail
        assert sorted(health.frame_hz) == sorted(board.name for board in BOARDS)
        for board in BOARDS:
            assert abs(health.frame_hz[board.name] / board.frame_hz - 1.0) < 0.02

    def test_settings_that_do_not_fit_together_are_refused(self) -> None:
        fore, hind = BOARDS

        def out(
            board: str = "fore", channel: int = 0, min_us: float = 600.0, max_us: float = 2400.0
        ) -> Output:
            return Output(board=board, channel=channel, min_us=min_us, max_us=max_us)

        twin = BoardSettings(name="twin", bus=1, address=0x40, frame_hz=50.0)
        namesake = BoardSettings(name="fore", bus=1, address=0x42, frame_hz=50.0)
        stopped = BoardSettings(name="fore", bus=1, address=0x40, frame_hz=0.0)
        for boards, outputs in (
            ((fore, twin), (out(),)),
            ((fore, namesake), (out(),)),
            ((stopped,), (out(),)),
            ((fore, hind), (out(), out())),
            ((fore, hind), (out(board="left"),)),
            ((fore, hind), (out(channel=16),)),
            ((fore, hind), (out(channel=-1),)),
            ((fore, hind), (out(min_us=2400.0, max_us=600.0),)),
            ((fore, hind), (out(min_us=0.0),)),
            ((fore, hind), (out(max_us=math.nan),)),
        ):
            _assert_raises(SettingsError, lambda b=boards, o=outputs: self.make(b, o))  # type: ignore[misc]


def _assert_raises(kind: type[DriverError], call: Callable[[], object]) -> None:
    message = None
    try:
        call()
    except kind as error:
        message = str(error)
    assert message is not None, f"{kind.__name__} was not raised"
    assert len(message) > 20, f"{kind.__name__} says too little: {message}"
