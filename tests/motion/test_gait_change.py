"""Changes of gait while walking: slow enough first, feet down, then the new gait, and on at full speed."""

from __future__ import annotations

from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest

from hobnail.robot import Robot
from robots import bramble, juniper
from walks import Walk, assert_sound

CHANGES = [
    (robot, first.name, second.name)
    for robot in (juniper(), bramble())
    for first, second in permutations(robot.gaits, 2)
]


def gentle(robot: Robot) -> Robot:
    """The robot, slow to change its speed."""
    envelope = replace(robot.envelope, acceleration_m_s2=0.03, turn_acceleration_rad_s2=0.1)
    return replace(robot, envelope=envelope)


@pytest.mark.parametrize(
    ("robot", "first", "second"), CHANGES, ids=[f"{robot.name}-{a}-{b}" for robot, a, b in CHANGES]
)
@pytest.mark.parametrize("shares", [(1.0, 0.0, 0.0), (0.0, 0.0, -1.0)], ids=["ahead", "turning"])
def test_a_change_in_full_walk_of_a_robot_that_brakes_gently(
    robot: Robot, first: str, second: str, shares: tuple[float, float, float]
) -> None:
    """No foot slips or is out of reach (see `assert_sound`), the new gait comes, and the robot
    walks as fast in it as if it had started so."""
    robot = gentle(robot)
    walk = Walk(robot)
    walk.controller.gait(first)
    walk.walk(*shares).go(round(12.0 / walk.dt_s))
    walk.controller.gait(second)
    walk.go(round(25.0 / walk.dt_s))
    assert_sound(walk)
    assert walk.ticks[-1].gait == second
    fresh = Walk(robot)
    fresh.controller.gait(second)
    fresh.walk(*shares).go(round(25.0 / walk.dt_s))
    expected = np.array(fresh.ticks[-1].velocity) / fresh.ticks[-1].slowdown
    found = np.array(walk.ticks[-1].velocity) / walk.ticks[-1].slowdown
    assert found == pytest.approx(expected, rel=0.02)


def test_a_change_of_mind_takes_the_speed_up_again() -> None:
    """Told another gait and at once the old one again, the robot walks on as before."""
    robot = gentle(juniper())
    walk = Walk(robot).walk(1.0, 0.0, 0.0)
    walk.go(1200)
    before = walk.ticks[-1].velocity[0] / walk.ticks[-1].slowdown
    walk.controller.gait("crawl")
    walk.go(40)
    walk.controller.gait("trot")
    walk.go(800)
    assert {tick.gait for tick in walk.ticks} == {"trot"}
    assert walk.ticks[-1].velocity[0] / walk.ticks[-1].slowdown == pytest.approx(before, rel=0.01)


def test_told_to_stand_during_a_change_the_robot_stands() -> None:
    walk = Walk(gentle(juniper())).walk(0.5, 0.0, 0.5)
    walk.go(600)
    walk.controller.gait("crawl")
    walk.go(20)
    walk.controller.stand()
    walk.until_settled()
    assert walk.ticks[-1].gait == "crawl"
