"""What a leg's masses do when its foot moves, against pinocchio; kg, m, s."""

from __future__ import annotations

import numpy as np
import pinocchio as pin
import pytest

from hobnail.motion.balance import neutral_feet
from hobnail.motion.leg import LegKinematics
from hobnail.motion.swung import SwungLeg
from hobnail.robot import Robot, Vec3
from pinocchio_judge import RobotJudge
from robots import anvil, bramble, juniper, stilt

ROBOTS = pytest.mark.parametrize(
    "robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name
)


def from_hips(robot: Robot) -> list[Vec3]:
    """The neutral feet, each relative to its hip."""
    height_m = robot.stance.height_m
    return [
        (x - leg.hip_m[0], y - leg.hip_m[1], leg.foot_radius_m - height_m - leg.hip_m[2])
        for leg, (x, y) in zip(robot.legs, neutral_feet(robot), strict=True)
    ]


@ROBOTS
@pytest.mark.parametrize("axis", [0, 1, 2])
def test_momentum_of_a_leg_whose_foot_moves(robot: Robot, axis: int) -> None:
    """One foot at 1 m/s ahead, left or up, all else still: linear momentum, and angular momentum
    about the ground below the body."""
    places = from_hips(robot)
    kinematics = [LegKinematics(leg) for leg in robot.legs]
    joints = [list(k.angles(*at)) for k, at in zip(kinematics, places, strict=True)]
    judge = RobotJudge(robot)
    q = pin.neutral(judge.model)
    q[7:] = np.ravel(joints)
    for index, (leg, at) in enumerate(zip(robot.legs, places, strict=True)):
        velocity = np.eye(3)[axis]
        speeds = np.zeros(judge.model.nv)
        turning = np.linalg.solve(judge.foot_jacobian(joints, index), velocity)
        speeds[6 + 3 * index : 9 + 3 * index] = turning
        momentum = pin.computeCentroidalMomentum(judge.model, judge.data, q, speeds)
        centre = judge.data.com[0] + (0.0, 0.0, robot.stance.height_m)
        swung = SwungLeg(leg, kinematics[index], at, robot.stance.height_m)
        assert np.array(swung.momentum_kg) @ velocity == pytest.approx(momentum.linear, abs=1e-6)
        about_ground = momentum.angular + np.cross(centre, momentum.linear)
        assert np.array(swung.angular_kg_m) @ velocity == pytest.approx(about_ground, abs=1e-6)


def test_a_knee_that_goes_another_way_than_its_foot_turns_the_robot() -> None:
    """juniper's knees point back; a foot that swings out lengthens its leg, and the knee comes
    ahead: on the left and on the right that turns the same way."""
    robot = juniper()
    left, right = (
        SwungLeg(leg, LegKinematics(leg), at, robot.stance.height_m)
        for leg, at in list(zip(robot.legs, from_hips(robot), strict=True))[:2]
    )
    assert left.momentum_kg[0][1] == pytest.approx(-right.momentum_kg[0][1])
    assert abs(left.momentum_kg[0][1]) > 0.005
