"""A board's true clock from a measured frame rate; Hz.

By the PCA9685 data sheet, Rev. 4, section 7.3.5: a frame is 4096 (prescale + 1)
periods of the oscillator.  25 MHz is typical only; 24 to 27 MHz have been seen
(common practice).
"""

from __future__ import annotations

import re

from hobnail.errors import CommandError
from hobnail.robot import Board, Joint
from hobnail.servo import JointMap
from hobnail.workshop.calibrate.effects import Keep, Quit, Say, Skip, Sleep, Steps, Wake, agree, ask, shown
from hobnail_drivers.registers import COUNTS, pre_scale, true_frame_hz

OSCILLATOR_RANGE_HZ = (23e6, 27e6)
SAME_RATE = 0.002  # chips drift by less, warm or cold (common practice)


def expected_frame_hz(board: Board) -> float:
    """The frame rate that the board has if its clock is what it is taken for."""
    return true_frame_hz(board.oscillator_hz, pre_scale(board.oscillator_hz, board.frame_hz))


def frame_range_hz(board: Board) -> tuple[float, float]:
    """The frame rates that a good board can be measured at."""
    prescale = pre_scale(board.oscillator_hz, board.frame_hz)
    low, high = (true_frame_hz(oscillator, prescale) for oscillator in OSCILLATOR_RANGE_HZ)
    return low, high


def true_oscillator_hz(board: Board, measured_hz: float) -> float:
    """The clock of a board, set up as `board` says, whose frame rate is measured.

    Raises CommandError when no good board has that rate.
    """
    low, high = frame_range_hz(board)
    if not low * (1.0 - 1e-9) <= measured_hz <= high * (1.0 + 1e-9):
        raise CommandError(
            f"the measured frame rate of board {board.name} is {measured_hz:g} Hz; a chip with a clock of "
            f"{OSCILLATOR_RANGE_HZ[0] / 1e6:g} to {OSCILLATOR_RANGE_HZ[1] / 1e6:g} MHz has {low:.2f} to "
            f"{high:.2f} Hz here: measure from one rise of the pulse to the next, on this very board"
        )
    return measured_hz * COUNTS * (pre_scale(board.oscillator_hz, board.frame_hz) + 1)


def check_fresh(board: Board, measured_hz: float) -> None:
    """A clock that is kept may change the prescale, and with it the frame rate: a rate measured before
    that, typed once more, would be taken for another clock.  Raises CommandError for one that looks so.
    """
    present = pre_scale(board.oscillator_hz, board.frame_hz)
    for prescale in (present - 1, present + 1):
        if abs(measured_hz / true_frame_hz(board.oscillator_hz, prescale) - 1.0) < SAME_RATE:
            raise CommandError(
                f"{measured_hz:g} Hz is what board {board.name} had at prescale {prescale}; set up as it is "
                f"now, for {board.oscillator_hz / 1e6:g} MHz, it has prescale {present} and should have "
                f"{expected_frame_hz(board):.2f} Hz. Measure again, with --clock {board.name} alone"
            )


def clock_session(board: Board, joint: Joint, start_rad: float) -> Steps[None]:
    """Let one joint of the board pulse, ask for its measured frame rate, keep the clock."""
    low, high = frame_range_hz(board)
    yield Say(
        f"Clock of board {board.name}. One joint gets pulses, {joint.name} on channel {joint.channel}: it "
        "may jump to its rest posture at full speed, so the robot must be on a stand, hands clear, a switch "
        "in the servo supply within reach. Put an oscilloscope or a frequency counter to that channel's "
        "signal and measure the frame rate: from one rise to the next. If the chip's clock were "
        f"{board.oscillator_hz / 1e6:g} MHz, that would be {expected_frame_hz(board):.2f} Hz; "
        f"{low:.2f} to {high:.2f} Hz is plausible."
    )
    try:
        if not (yield from agree("wake", "Send the pulses?")):
            return
        least, most = joint.pulse_limits_us
        yield Wake(joint.name, min(max(JointMap(joint).pulse_us(start_rad), least), most))
        yield from _measure(board)
    except (Quit, Skip):
        yield Say("Ended.")
    yield Sleep()


def _measure(board: Board) -> Steps[None]:
    while True:
        answer = yield from ask("frame-rate", "Measured frame rate, Hz?", ("HERTZ", "skip", "quit"))
        found = re.fullmatch(r"(\d{1,5}(?:\.\d{0,6})?)\s*(?:hz)?", answer, re.ASCII)
        if not found:
            yield Say(f"{shown(answer)} is no frame rate; allowed: a number of Hz, such as 305.17")
            continue
        try:
            oscillator_hz = true_oscillator_hz(board, float(found[1]))
        except CommandError as error:
            yield Say(str(error))
            continue
        off = oscillator_hz / board.oscillator_hz - 1.0
        yield Say(
            f"That is a clock of {oscillator_hz / 1e6:.4f} MHz, {off:+.2%} of what it was taken for: "
            "pulses were off by as much."
        )
        if (yield from agree("clock-keep", "Keep it?")):
            yield Keep(board.name, {"oscillator_hz": oscillator_hz})
            yield Say("kept")
            return
