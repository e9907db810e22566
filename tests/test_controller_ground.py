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
    record,
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


@pytest.mark.parametrize("robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name)
@pytest.mark.parametrize("number", [0, 1, 2])
def test_full_commands_of_every_gait(robot: Robot, number: int) -> None:
    """Long enough to be steady, where the legs' reach and the body's shift are used up."""
    gait = robot.gaits[number % len(robot.gaits)]
    for shares in ((1.0, 0.0, 0.0), (-1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0), (0.6, -0.6, -0.6)):
        walk = Walk(robot)
        walk.controller.gait(gait.name)
        walk.walk(*shares).go(round(2.5 * gait.cycle_range_s[1] / walk.dt_s))
        assert_sound(walk)


@DEMO
@examples(20)
@given(commands=sequences(postures(), supplies()))
def test_standing_in_any_posture(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@DEMO
@examples(30)
@given(commands=sequences(walks(), walks(), postures(), gaits(), stands()))
def test_walking_in_any_posture(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@DEMO
@examples(20)
@given(commands=sequences(walks(), periods(), gaits(), stands(), most=10))
def test_ticks_of_any_length(robot: Robot, commands: Commands) -> None:
    assert_sound(perform(Walk(robot), commands))


@DEMO
def test_feet_step_in_ticks_as_long_as_their_swings(robot: Robot) -> None:
    """After a stall the loop hands on all the time there was: no step may be lost in it."""
    for gait in robot.gaits:
        walk = Walk(robot, dt_s=0.2)
        walk.controller.gait(gait.name)
        walk.controller.supply_v = 20.0 * robot.supply.nominal_v
        walk.walk(0.5, 0.0, 0.0).go(60)
        assert all(tick.out_of_reach == 0 for tick in walk.ticks)
        gone = walk.ticks[-1].pose[0]
        assert gone > 0.1
        found = record(walk).on_ground_m
        # Every foot has come along, to within a stride.
        assert found[-1, :, 0] - found[0, :, 0] == pytest.approx(gone, abs=0.5 * robot.stance.height_m)


@examples(10)
@given(
    robot=st.sampled_from([juniper(), bramble(), stilt(), anvil()]) | made_up(),
    commands=sequences(walks(), postures(), gaits(), stands(), supplies(), periods()),
)
def test_two_runs_are_bit_identical(robot: Robot, commands: Commands) -> None:
    first, second = (perform(Walk(robot), commands) for _ in range(2))
    assert first.ticks == second.ticks
