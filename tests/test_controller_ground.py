"""What must hold of every walk, whatever is commanded: feet on the ground, joints and pulses in bounds."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.robot import Robot
from robots import anvil, bramble, examples, juniper, made_up, stilt
from walks import (
    Command,
    Walk,
    assert_sound,
    gaits,
    perform,
    periods,
    postures,
    sequences,
    stands,
    supplies,
    walks,
)

Commands = list[tuple[Command, int]]
DEMO = pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
MADE_UP = pytest.mark.parametrize("robot", [stilt(), anvil()], ids=lambda robot: robot.name)


@DEMO
@examples(30)
@given(commands=sequences(walks(), walks(), stands(), gaits(), supplies()))
def test_walking(robot: Robot, commands: Commands) -> None:
    """Any change of velocity, gait and supply."""
    assert_sound(perform(Walk(robot), commands))


@MADE_UP
@examples(15)
@given(commands=sequences(walks(), walks(), stands(), gaits(), supplies()))
def test_walking_with_other_proportions(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@examples(25)
@given(robot=made_up(), commands=sequences(walks(), walks(), stands(), gaits(), supplies(), most=5))
def test_walking_of_any_robot(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@DEMO
@examples(20)
@given(commands=sequences(postures(), supplies()))
def test_standing_in_any_posture(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@DEMO
@examples(30)
@given(commands=sequences(walks(), walks(), postures(0.3), gaits(), stands()))
def test_walking_in_moderate_postures(robot: Robot, commands: Commands) -> None:
    """Within three tenths of the posture's limits: beyond, strides can leave too little reach."""
    assert_sound(perform(Walk(robot), commands))


@DEMO
@examples(20)
@given(commands=sequences(walks(), periods(), gaits(), stands(), most=10))
def test_ticks_of_any_length(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@examples(10)
@given(
    robot=st.sampled_from([juniper(), bramble(), stilt(), anvil()]) | made_up(),
    commands=sequences(walks(), postures(), gaits(), stands(), supplies(), periods()),
)
def test_two_runs_are_bit_identical(robot: Robot, commands: Commands) -> None:
    first, second = (perform(Walk(robot), commands) for _ in range(2))
    assert first.ticks == second.ticks
