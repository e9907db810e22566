"""Commands fitted to what a robot can do, at the ends of that."""

from __future__ import annotations

from dataclasses import replace

import pytest

from hobnail.controller import Controller
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
