"""Changes and their history: what still stands, and histories that are odd; degrees as in the file."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.config import load_robot
from hobnail.config.calibration import WALK, Calibration, Change
from hobnail.config.calibration_history import UNDO, changed, part_named, read_values, standing, undone
from hobnail.config.fields import Text
from hobnail.errors import CalibrationError, CommandError
from hobnail.robot import Board, Joint, WalkResponse

ROBOT = load_robot(Path(__file__).parents[1] / "corpus" / "sorrel.yaml")
WHEN = "2026-03-01T14:30:00Z"


def change(what: str, old: str = "0", new: str = "1") -> Change:
    return Change(when=WHEN, who="bench", what=what, old=old, new=new)


@given(st.lists(st.booleans(), max_size=30))
def test_what_stands_is_a_stack(acts: list[bool]) -> None:
    history, stack = [], []
    for number, is_change in enumerate(acts):
        entry = change(f"left-front.hip trim_deg{number}" if is_change else f"{UNDO}something")
        history.append(entry)
        if is_change:
            stack.append(entry)
        elif stack:
            stack.pop()
    assert standing(tuple(history)) == stack


@pytest.mark.parametrize("what", ["left-front.toe trim_deg", "left-front.hip colour", "nonsense"])
def test_a_change_to_what_the_robot_does_not_have_is_told(what: str) -> None:
    calibration = Calibration(robot="sorrel", history=(change(what),))
    with pytest.raises(CommandError, match="which this robot does not have: edit the file by hand"):
        undone(calibration, ROBOT, when=WHEN, who="bench")


@pytest.mark.parametrize("old", ["", "soon", "99", "[1, 2]"])
def test_an_old_value_that_is_none_is_told(old: str) -> None:
    calibration = Calibration(robot="sorrel", history=(change("left-front.hip trim_deg", old=old),))
    with pytest.raises(CalibrationError, match=r"the history's old value.*trim_deg"):
        undone(calibration, ROBOT, when=WHEN, who="bench")


def test_a_value_that_was_configured_is_forgotten_and_no_section_is_left() -> None:
    once = changed(Calibration(robot="sorrel"), ROBOT, "main", when=WHEN, who="bench", oscillator_hz=25.3e6)
    back = undone(once, ROBOT, when=WHEN, who="bench")
    assert back.boards == {}
    assert [entry.what for entry in back.history] == ["main oscillator_mhz", f"{UNDO}main oscillator_mhz"]
    assert (back.history[1].old, back.history[1].new) == ("25.3", "25")


def test_no_board_can_be_called_as_the_walk_is() -> None:
    robot = replace(ROBOT, boards=(replace(ROBOT.boards[0], name="walk"),))
    assert isinstance(part_named(robot, "walk"), Board)
    assert isinstance(part_named(robot, WALK), WalkResponse)
    assert isinstance(part_named(robot, "left-front.hip"), Joint)
    assert not re.fullmatch(Text().pattern, WALK)


def test_typed_values_are_those_of_their_part() -> None:
    joint, board = ROBOT.joints[0], ROBOT.boards[0]
    assert read_values(joint, "trim_deg: 9", "typed") == {"trim_rad": math.radians(9)}
    assert read_values(board, "oscillator_mhz: 25.5", "typed") == {"oscillator_hz": 25.5e6}
    assert read_values(ROBOT.walk, "turn_deg: 342", "typed") == {"turn": pytest.approx(0.95)}
    with pytest.raises(CalibrationError, match="typed:1:1: trim_deg: found unknown key"):
        read_values(board, "trim_deg: 9", "typed")
