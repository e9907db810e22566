"""Centre of mass against pinocchio, and the neutral stance under it; m, kg."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.motion.balance import GRAVITY_M_S2, centre_of_mass, neutral_feet
from hobnail.motion.leg import LegKinematics
from hobnail.motion.support import support_centre
from hobnail.robot import Robot, Vec2, Vec3
from pinocchio_judge import RobotJudge
from robots import anvil, bramble, examples, fixed_robots, juniper, made_up, stilt

ROBOTS = pytest.mark.parametrize("robot", fixed_robots(), ids=lambda robot: robot.name)


def standing_joints(robot: Robot, feet: list[Vec2]) -> list[Vec3]:
    """Joint angles for feet at those places under a body at stance height."""
    joints = []
    for leg, (x, y) in zip(robot.legs, feet, strict=True):
        z = leg.foot_radius_m - robot.stance.height_m
        at = (x - leg.hip_m[0], y - leg.hip_m[1], z - leg.hip_m[2])
        joints.append(LegKinematics(leg).angles(*at))
    return joints


def test_gravity() -> None:
    """As the reference values have it."""
    assert GRAVITY_M_S2 == 9.81


@examples(100)
@given(robot=made_up(), seed=st.integers(0, 2**32 - 1))
def test_centre_of_mass_agrees_with_pinocchio(robot: Robot, seed: int) -> None:
    joints = np.random.default_rng(seed).uniform(-2.0, 2.0, (len(robot.legs), 3))
    ours = centre_of_mass(robot, joints.tolist())
    assert ours == pytest.approx(RobotJudge(robot).centre_of_mass(joints.tolist()), abs=1e-12)


def test_centre_of_mass_by_hand() -> None:
    """juniper with its legs hanging straight: by symmetry over the origin, and as low as the
    masses say: trunk 1.36 kg at -15 mm; four times 0.13 at 0, 0.09 at -52.5, 0.04 at -167.5."""
    robot = juniper()
    x, y, z = centre_of_mass(robot, [(0.0, 0.0, 0.0)] * 4)
    assert (x, y) == pytest.approx((0.0, 0.0), abs=1e-15)
    moment = 1.36 * -0.015 + 4 * (0.09 * -0.0525 + 0.04 * -0.1675)
    assert z == pytest.approx(moment / (1.36 + 4 * 0.26), rel=1e-12)


@ROBOTS
def test_demo_robots_stand_with_their_mass_over_the_middle_of_their_support(robot: Robot) -> None:
    feet = neutral_feet(robot)
    assert_over_the_support(robot, feet)


@examples(100)
@given(robot=made_up())
def test_any_robot_stands_with_its_mass_over_the_middle_of_its_support(robot: Robot) -> None:
    """Of the gait that walking starts with; by pinocchio.  `forward_m` is how far ahead of
    that the feet are meant to be."""
    assert_over_the_support(robot, neutral_feet(robot))


def assert_over_the_support(robot: Robot, feet: list[Vec2]) -> None:
    gait = robot.gaits[0]
    com = RobotJudge(robot).centre_of_mass(standing_joints(robot, feet))
    centre = support_centre(feet, gait.duty, gait.phases)
    assert centre[0] == pytest.approx(com[0] + robot.stance.forward_m, abs=1e-5)
    assert centre[1] == pytest.approx(com[1], abs=1e-5)


@pytest.mark.parametrize("robot", [juniper(), stilt()], ids=lambda robot: robot.name)
def test_a_shifted_battery_shifts_the_feet(robot: Robot) -> None:
    """Common practice: the feet must follow the centre of mass.  By nearly the trunk's share of
    the mass times the shift, the legs going along with the feet."""
    x, y, z = robot.body.com_m
    shifted = replace(robot, body=replace(robot.body, com_m=(x + 0.02, y - 0.01, z)))
    share = robot.body.mass_kg / robot.mass_kg
    for before, after in zip(neutral_feet(robot), neutral_feet(shifted), strict=True):
        moved = (after[0] - before[0], after[1] - before[1])
        assert share * 0.02 < moved[0] < 0.021
        assert -0.0105 < moved[1] < -share * 0.01


@pytest.mark.parametrize("robot", [juniper(), bramble(), anvil()], ids=lambda robot: robot.name)
def test_spread_moves_the_feet_outward_by_that_much(robot: Robot) -> None:
    wider = replace(robot, stance=replace(robot.stance, spread_m=robot.stance.spread_m + 0.01))
    for leg, before, after in zip(robot.legs, neutral_feet(robot), neutral_feet(wider), strict=True):
        outward = 1.0 if leg.hip_m[1] > 0.0 else -1.0
        assert (after[1] - before[1]) * outward == pytest.approx(0.01, abs=5e-4)
        assert after[0] == pytest.approx(before[0], abs=5e-4)
