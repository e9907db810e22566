"""The simulated servos against hand calculation; times by an injected clock."""

from __future__ import annotations

import pytest

from hobnail_drivers.contract import BoardSettings, Output
from hobnail_drivers.simulated import SimulatedDriver


class Clock:
    """Seconds that pass only when told to."""

    def __init__(self) -> None:
        self.now_s = 100.0

    def __call__(self) -> float:
        return self.now_s


BOARD = BoardSettings(name="main", bus=1, address=0x40, frame_hz=50.0)


def one_servo(clock: Clock, **extra: float) -> SimulatedDriver:
    output = Output(board="main", channel=3, min_us=500.0, max_us=2500.0, speed_us_s=1000.0, dead_band_us=4.0)
    driver = SimulatedDriver([BOARD], [output], clock=clock, **extra)  # type: ignore[arg-type]
    driver.open()
    return driver


def test_a_shaft_is_unknown_until_its_first_pulse() -> None:
    driver = one_servo(Clock())
    assert driver.shaft_us(0) is None
    driver.write([None])
    assert driver.shaft_us(0) is None


def test_an_unplaced_shaft_starts_at_the_farther_limit() -> None:
    driver = one_servo(Clock())
    driver.write([1800.0])
    assert driver.shaft_us(0) == 500.0


def test_a_shaft_turns_at_its_speed_and_rests_at_the_edge_of_the_dead_band() -> None:
    clock = Clock()
    driver = one_servo(clock)
    driver.place(0, 1000.0)
    driver.write([1500.0])
    sent_us = driver.pulses_us[0]
    assert sent_us is not None
    clock.now_s += 0.25
    assert driver.shaft_us(0) == pytest.approx(1250.0)
    clock.now_s += 10.0
    assert driver.shaft_us(0) == pytest.approx(sent_us - 4.0)
    driver.write([sent_us - 4.9])  # one count back
    clock.now_s += 10.0
    assert driver.shaft_us(0) == pytest.approx(sent_us - 4.0)  # within the dead band: no motion


def test_pulses_are_quantised_to_4096_counts_a_frame() -> None:
    driver = one_servo(Clock())
    driver.write([1500.0])
    assert driver.pulses_us[0] == pytest.approx(307 * 20000.0 / 4096.0)  # 50 Hz: 4.8828 us a count


def test_without_pulses_the_shaft_stays() -> None:
    clock = Clock()
    driver = one_servo(clock)
    driver.place(0, 1000.0)
    driver.write([2000.0])
    clock.now_s += 0.1
    driver.release()
    clock.now_s += 5.0
    assert driver.shaft_us(0) == pytest.approx(1100.0)


def test_every_change_is_kept_with_its_time_and_the_record_is_bounded() -> None:
    clock = Clock()
    driver = one_servo(clock, history=3)
    for pulse_us in (1000.0, 1000.0, 1100.0, 1200.0, None):
        clock.now_s += 1.0
        driver.write([pulse_us])
    assert [transition.time_s for transition in driver.transitions] == [103.0, 104.0, 105.0]
    assert driver.transitions[-1].pulses_us == (None,)
    assert driver.dropped == 1
    assert driver.writes == 5
