"""Postures and shifts that the legs cannot follow give way, as far as they must and no farther."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given

from hobnail.controller import Controller
from hobnail.motion.balance import neutral_feet
from hobnail.motion.foot import Foot
from hobnail.motion.whole_body import WholeBody
from hobnail.motion.yielding import COMES_BACK_HZ, Yielding
from hobnail.robot import Robot
from hobnail.servo import reachable_rad
from robots import anvil, bramble, examples, juniper, stilt
from walks import Command, Walk, postures, record, sequences, walks

ROBOTS = pytest.mark.parametrize(
    "robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name
)
PERIOD_S = 0.01


def standing(robot: Robot) -> list[Foot]:
    """The robot's feet in their neutral places."""
    return [
        Foot(
            leg,
            place,
            robot.stance.height_m,
            tuple(reachable_rad(joint) for joint in leg.joints),
            1.0 / len(robot.legs),
        )
        for leg, place in zip(robot.legs, neutral_feet(robot), strict=True)
    ]


class Stand:
    """A robot on its neutral feet, told one posture after another."""

    def __init__(self, robot: Robot) -> None:
        self.feet = standing(robot)
        self.body = WholeBody(self.feet)
        self.yielding = Yielding(robot.stance.height_m)

    def take(self, posture: Sequence[float], time_s: float = PERIOD_S) -> float:
        """The share of that posture that is taken."""
        self.yielding.solve(self.body, (0.0, 0.0, 0.0), (0.0, 0.0), posture, time_s)
        return self.yielding.share

    def come_to_rest(self, posture: Sequence[float]) -> float:
        """The share of that posture that is taken in the end."""
        for _ in range(round(2.0 / COMES_BACK_HZ / PERIOD_S)):
            share = self.take(posture)
            if not self.yielding.moving:
                return share
        raise AssertionError("still moving")


def far(robot: Robot) -> list[float]:
    """A posture that no leg reaches."""
    return [1.5 * robot.stance.height_m, 0.5, 0.4, 0.6, 0.1, -0.1]


@ROBOTS
def test_what_is_in_reach_is_taken_as_it_is(robot: Robot) -> None:
    stand, judge = Stand(robot), WholeBody(standing(robot))
    posture = [0.97 * robot.stance.height_m, 0.05, -0.04, 0.06, 0.005, -0.005]
    assert stand.take(posture) == 1.0
    judge.solve((0.0, 0.0, 0.0), (0.0, 0.0), posture)
    assert stand.body.joints_rad == judge.joints_rad
    assert stand.body.height_m == posture[0]
    assert not stand.yielding.moving


@ROBOTS
def test_what_is_out_of_reach_is_taken_as_far_as_legs_go(robot: Robot) -> None:
    """Every foot is in reach; with a hundredth more of the posture one would not be."""
    stand, judge = Stand(robot), WholeBody(standing(robot))
    posture = far(robot)
    assert 0.0 < stand.take(posture) < 1.0
    assert stand.body.out_of_reach == 0
    share = stand.come_to_rest(posture)
    assert 0.0 < share < 1.0
    assert stand.body.out_of_reach == 0
    level = robot.stance.height_m
    more = [level + (share + 0.01) * (posture[0] - level), *((share + 0.01) * each for each in posture[1:])]
    judge.solve((0.0, 0.0, 0.0), (0.0, 0.0), more)
    assert judge.out_of_reach > 0
    assert stand.body.height_m == pytest.approx(level + share * (posture[0] - level), abs=1e-12)


@ROBOTS
def test_standing_still_out_of_reach_is_still(robot: Robot) -> None:
    stand = Stand(robot)
    stand.take(far(robot))
    stand.come_to_rest(far(robot))
    angles = stand.body.joints_rad
    for _ in range(50):
        stand.take(far(robot))
        assert stand.body.joints_rad == angles
        assert not stand.yielding.moving


@ROBOTS
def test_what_was_given_up_comes_back_at_its_rate(robot: Robot) -> None:
    stand = Stand(robot)
    share = stand.take(far(robot))
    level = [robot.stance.height_m, 0.01, 0.0, 0.0, 0.0, 0.0]
    while share < 1.0:
        before, share = share, stand.take(level)
        assert share == pytest.approx(min(before + COMES_BACK_HZ * PERIOD_S, 1.0), abs=1e-12)
        assert stand.yielding.moving
    stand.take(level)
    assert not stand.yielding.moving


@ROBOTS
@examples(10)
@given(commands=sequences(walks(), postures(), walks(), ticks=100))
def test_no_foot_is_dragged_whatever_the_posture(robot: Robot, commands: list[tuple[Command, int]]) -> None:
    """Walking at any speed in any posture within its limits: distances between standing feet,
    from the joint angles, do not change; and at last the robot settles as it was told."""
    walk = Walk(robot)
    for command, ticks in commands:
        command(walk)
        walk.go(ticks)
    walk.controller.stand()
    walk.controller.rise()
    walk.until_settled()
    assert max(tick.out_of_reach for tick in walk.ticks) == 0
    assert walk.ticks[-1].height_m == robot.stance.height_m
    feet, stance = record(walk).by_kinematics_m, np.array([tick.stance for tick in walk.ticks])
    apart = np.linalg.norm(feet[:, :, None] - feet[:, None], axis=3)
    both = stance[:, :, None] & stance[:, None]
    steps = np.abs(np.diff(apart, axis=0))[both[1:] & both[:-1]]
    assert steps.max(initial=0.0) < 1e-6


def test_a_share_changes_without_jumps() -> None:
    """Juniper at full speed, told to stand taller and tilted more than its strides leave reach for: the
    body gives way smoothly, and is never slowed to a stand by it."""
    robot = juniper()
    limits = replace(robot.posture_limits, height_m=(0.12, 0.22), roll_rad=0.2)
    robot = replace(robot, posture_limits=limits)
    controller = Controller(robot)
    controller.posture(height_m=0.22, roll_rad=0.2, pitch_rad=limits.pitch_rad)
    controller.walk(robot.envelope.forward_m_s, 0.0, 0.0)
    ticks = [controller.tick(PERIOD_S) for _ in range(600)]
    heights = [tick.height_m for tick in ticks]
    assert max(abs(b - a) for a, b in pairwise(heights)) < 0.003
    assert 0.2 < min(heights[300:]) < 0.219
    assert min(tick.slowdown for tick in ticks[300:]) > 0.1
    assert max(tick.out_of_reach for tick in ticks) == 0
