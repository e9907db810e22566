"""The forces that the feed-forward takes the ground to do: together what drives the robot; N, N m."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.motion.balance import neutral_feet
from hobnail.motion.feed_forward import FeedForward
from hobnail.motion.foot import Foot
from hobnail.motion.load import FootDrive
from hobnail.motion.whole_body import WholeBody
from hobnail.robot import Robot, Vec3
from hobnail.servo import reachable_rad
from robots import anvil, bramble, examples, juniper, stilt

ROBOTS = pytest.mark.parametrize(
    "robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name
)
forces = st.floats(-5.0, 5.0)


class Listener:
    """In the place of a leg's correction: adds nothing, and keeps the forces on its foot."""

    def __init__(self, told: list[Vec3]) -> None:
        self._told = told

    def command(self, angles: Vec3, _speeds: Vec3, foot_m: Vec3, load: float, drive: FootDrive) -> Vec3:
        """The angles as they are."""
        x, y, _ = foot_m
        ahead, left, up, spin = drive
        self._told.append((load * (ahead - spin * y), load * (left + spin * x), load * up))
        return angles


@ROBOTS
@examples(30)
@given(
    drive=st.tuples(forces, forces, st.floats(0.0, 40.0), forces),
    pose=st.tuples(*[st.floats(-0.02, 0.02)] * 3),
)
def test_feet_do_together_what_the_ground_does(
    robot: Robot, drive: tuple[float, float, float, float], pose: tuple[float, float, float]
) -> None:
    """Wherever the body stands over its feet, and whichever two of them carry it: the forces sum up
    to the drive's, and so do their moments about the body origin."""
    told: list[Vec3] = []
    feet = []
    for leg, place in zip(robot.legs, neutral_feet(robot), strict=True):
        limits = tuple(reachable_rad(joint) for joint in leg.joints)
        foot = Foot(leg, place, robot.stance.height_m, limits, 0.0)
        foot.correction = Listener(told)  # type: ignore[assignment]
        feet.append(foot)
    feet[0].load, feet[-1].load = 0.3, 0.7
    body = WholeBody(feet)
    body.solve(pose, (0.0, 0.0), (robot.stance.height_m, 0.0, 0.0, 0.0, 0.0, 0.0))
    FeedForward(feet, body, drive)
    assert len(told) == len(feet)
    total = np.array(told).sum(axis=0)
    moment = sum(x * fy - y * fx for (x, y, _), (fx, fy, _) in zip(body.feet_m, told, strict=True))
    assert (*total, moment) == pytest.approx(drive, abs=1e-9)
