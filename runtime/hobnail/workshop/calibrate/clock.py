"""A board's true clock from a measured frame rate; Hz.

By the PCA9685 data sheet, Rev. 4, section 7.3.5: a frame is 4096 (prescale + 1)
periods of the oscillator.  25 MHz is typical only; 24 to 27 MHz have been seen
(common practice).
"""

from __future__ import annotations

from hobnail.errors import CommandError
from hobnail.robot import Board
from hobnail_drivers.registers import COUNTS, pre_scale, true_frame_hz

OSCILLATOR_RANGE_HZ = (23e6, 27e6)


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
