"""A board's true clock from its measured frame rate, on the chip model under the real driver; Hz, us."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.errors import CommandError
from hobnail.robot import Board, Robot
from hobnail.service.drivers import make_driver
from hobnail.workshop.calibrate.clock import (
    clock_session,
    expected_frame_hz,
    frame_range_hz,
    true_oscillator_hz,
)
from hobnail.workshop.calibrate.effects import Ask, Keep, Say, Sleep, Wake
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.registers import COUNTS
from robots import examples, juniper


def board_at(frame_hz: float, oscillator_hz: float = 25e6) -> Board:
    return replace(juniper().boards[0], frame_hz=frame_hz, oscillator_hz=oscillator_hz)


def on_chip(robot: Robot, true_hz: float) -> ModelledPca9685Driver:
    """The real driver, set up for what the board is taken for, over a chip with a clock of its own."""
    now = [0.0]

    def sleep(seconds: float) -> None:
        now[0] += seconds

    def kind(boards, outputs, *, argument=""):  # type: ignore[no-untyped-def]
        return ModelledPca9685Driver(boards, outputs, argument=argument, clock=lambda: now[0], sleep=sleep)

    driver = make_driver(kind, robot)  # type: ignore[arg-type]
    assert isinstance(driver, ModelledPca9685Driver)
    for chip in driver.chips.values():
        chip.oscillator_hz = true_hz
    driver.open()
    return driver


@given(
    true_hz=st.floats(23e6, 27e6),
    taken_hz=st.floats(23e6, 27e6),
    frame_hz=st.sampled_from([50.0, 60.0, 100.0, 200.0, 300.0, 333.0]),
    share=st.floats(0.0, 1.0),
)
@examples(60)
def test_calibrated_every_pulse_is_right_to_half_a_count(
    true_hz: float, taken_hz: float, frame_hz: float, share: float
) -> None:
    """Measure the frame on the pin, calibrate, set up anew, measure the pulse on the pin."""
    robot = replace(juniper(), boards=(board_at(frame_hz, taken_hz),))
    driver = on_chip(robot, true_hz)
    measured_hz = 1.0 / driver.chips["main"].frame_s
    driver.close()
    found_hz = true_oscillator_hz(robot.boards[0], measured_hz)
    assert found_hz == pytest.approx(true_hz, rel=1e-12)
    driver = on_chip(replace(robot, boards=(board_at(frame_hz, found_hz),)), true_hz)
    low, high = robot.joints[0].pulse_limits_us
    asked_us = low + share * (high - low)
    driver.write([asked_us, *[None] * (len(robot.joints) - 1)])
    sent_us = driver.chips["main"].sending_us()[robot.joints[0].channel]
    assert sent_us is not None
    count_us = driver.chips["main"].frame_s / COUNTS * 1e6
    assert abs(sent_us - asked_us) <= 0.5 * count_us * (1 + 1e-9)
    driver.close()


def test_uncalibrated_pulses_are_off_by_as_much_as_the_clock() -> None:
    """So that the test above can fail: 26.5 MHz taken for 25 shortens 2000 us to 1887."""
    robot = juniper()
    driver = on_chip(robot, 26.5e6)
    driver.write([2000.0, *[None] * (len(robot.joints) - 1)])
    sent_us = driver.chips["main"].sending_us()[0]
    assert sent_us == pytest.approx(2000.0 * 25 / 26.5, abs=1.0)
    driver.close()


def test_published_frame_rates() -> None:
    """NXP data sheet PCA9685 Rev. 4, sec. 7.3.5: prescale 0x1E at 25 MHz is 196.8876 Hz; 121 is 50.0288."""
    assert expected_frame_hz(board_at(200.0)) == pytest.approx(196.8876, abs=1e-4)
    assert expected_frame_hz(board_at(50.0)) == pytest.approx(50.0288, abs=1e-4)
    assert true_oscillator_hz(board_at(200.0), 196.8876) == pytest.approx(25e6, rel=1e-6)
    assert true_oscillator_hz(board_at(50.0), 52.03) == pytest.approx(26e6, rel=1e-4)


@pytest.mark.parametrize("factor", [0.5, 0.9, 1.1, 2.0, 20.0])
def test_what_no_chip_does_is_refused_with_what_is_plausible(factor: float) -> None:
    board = board_at(50.0)
    low, high = frame_range_hz(board)
    with pytest.raises(CommandError, match=rf"has {low:.2f} to {high:.2f} Hz here: measure from one rise"):
        true_oscillator_hz(board, factor * 50.03)


def test_the_session_wakes_one_joint_asks_until_it_is_a_frame_rate_and_keeps() -> None:
    board = board_at(300.0)
    steps = clock_session(board, juniper().joints[0], 0.0)
    answers = iter(["y", "fast", "", "1500 us", "12", "310.2 Hz", "yes"])
    done: list[object] = []
    effect: object = next(steps)
    while True:
        done.append(effect)
        try:
            effect = steps.send(next(answers) if isinstance(effect, Ask) else "")
        except StopIteration:
            break
    (wake,) = [each for each in done if isinstance(each, Wake)]
    assert wake.joint == "left-front.roll"
    assert wake.pulse_us == pytest.approx(1500.0)
    (keep,) = [each for each in done if isinstance(each, Keep)]
    assert keep.name == "main"
    assert keep.values["oscillator_hz"] == pytest.approx(310.2 * 4096 * 20)
    told = [each.text for each in done if isinstance(each, Say)]
    assert any("'1500 us' is no frame rate; allowed: a number of Hz" in text for text in told)
    assert any("is 12 Hz; a chip with a clock of 23 to 27 MHz" in text for text in told)
    assert any("305.18 Hz" in text for text in told)
    assert isinstance(done[-1], Sleep)


@pytest.mark.parametrize("answers", [["no"], ["quit"], ["y", "skip"], ["y", "310.2", "no", "quit"]])
def test_left_without_a_value_nothing_is_kept(answers: list[str]) -> None:
    steps = clock_session(board_at(300.0), juniper().joints[0], 0.0)
    script = iter(answers)
    effect: object = next(steps)
    while True:
        assert not isinstance(effect, Keep)
        try:
            effect = steps.send(next(script) if isinstance(effect, Ask) else "")
        except StopIteration:
            break
    assert list(script) == []
