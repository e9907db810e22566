"""Walks of robots at the ends of their reach: feet that can hardly step, and swings beyond their ends."""

from __future__ import annotations

from dataclasses import replace

import pytest

from hobnail.controller import Controller
from hobnail.robot import Keyframe
from robots import juniper


@pytest.mark.parametrize("gait", [gait.name for gait in juniper().gaits])
def test_a_robot_without_room_for_a_stride_stays_where_it_is(gait: str) -> None:
    """Feet so large that they touch: a command leads nowhere, and `stand` still ends the walk."""
    robot = juniper()
    half_width = min(abs(leg.hip_m[1] + leg.abduction_m) for leg in robot.legs)
    legs = tuple(replace(leg, foot_radius_m=half_width) for leg in robot.legs)
    controller = Controller(replace(robot, legs=legs))
    controller.gait(gait)
    controller.walk(0.1, 0.1, 0.1)
    for _ in range(100):
        tick = controller.tick(0.01)
        assert tick.velocity == (0.0, 0.0, 0.0)
    controller.stand()
    for _ in range(1000):
        tick = controller.tick(0.01)
    assert tick.settled


@pytest.mark.parametrize("gait", ["trot", "crawl"])
@pytest.mark.parametrize("travel", [-0.5, 1.5])
@pytest.mark.parametrize("lift", [0.5, 1.5])
def test_a_swing_beyond_its_ends_stays_in_reach(gait: str, travel: float, lift: float) -> None:
    """Keyframes half a stride behind the lift-off or past the touch-down, and high: strides are
    shortened until the legs reach them as well, whatever the way to go."""
    robot = juniper()
    swing = tuple(
        Keyframe(time=t, travel=x, lift=z) for t, x, z in ((0, 0, 0), (0.6, travel, lift), (1, 1, 0))
    )
    gaits = tuple(replace(each, swing=swing, cycle_s=2.0, lift_m=0.05) for each in robot.gaits)
    robot = replace(robot, gaits=gaits)
    limits = robot.envelope
    for x, y, turn in ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0), (-0.6, -0.6, 0.5)):
        controller = Controller(robot)
        controller.gait(gait)
        controller.walk(x * limits.forward_m_s, y * limits.sideways_m_s, turn * limits.turn_rad_s)
        for _ in range(500):
            tick = controller.tick(0.01)
            assert tick.out_of_reach == 0
        assert tick.velocity != (0.0, 0.0, 0.0)
