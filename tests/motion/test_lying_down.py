"""Lying down out of a walk, as a stop of category 1 does: in its time, and within reach all the way."""

from __future__ import annotations

import pytest

from hobnail.controller import Controller
from hobnail.robot import Robot
from robots import bramble, juniper

WITHIN_S = 1.5


@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
@pytest.mark.parametrize("share", [(1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, -1.0)])
@pytest.mark.parametrize("walked_ticks", [150, 163, 177])
def test_from_full_speed_in_mid_stride(
    robot: Robot, share: tuple[float, float, float], walked_ticks: int
) -> None:
    envelope = robot.envelope
    controller = Controller(robot)
    most = (envelope.forward_m_s, envelope.sideways_m_s, envelope.turn_rad_s)
    vx, vy, yaw_rate = (a * b for a, b in zip(share, most, strict=True))
    controller.walk(vx, vy, yaw_rate)
    for _ in range(walked_ticks):
        controller.tick(robot.period_s)
    controller.lower(within_s=WITHIN_S)
    heights = []
    for _ in range(round(WITHIN_S / robot.period_s) + 1):
        tick = controller.tick(robot.period_s)
        assert tick.out_of_reach == tick.clamped == 0
        heights.append(tick.height_m)
        if tick.settled:
            break
    assert tick.settled
    assert heights == sorted(heights, reverse=True)
    # Feet planted in mid-stride may keep long legs from folding all the way.
    stance = robot.stance
    assert tick.height_m < stance.rest_height_m + 0.15 * (stance.height_m - stance.rest_height_m)
