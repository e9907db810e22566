"""Servos that trail their command are commanded ahead by it: the lead against its definition."""

from __future__ import annotations

from dataclasses import replace
from statistics import median

import pytest

from hobnail.controller import Controller
from hobnail.robot import Robot
from robots import juniper


def with_trail(trail_s: float | None) -> Robot:
    robot = juniper()
    legs = []
    for leg in robot.legs:
        roll, hip, knee = (
            replace(joint, servo=replace(joint.servo, trail_s=trail_s, dead_band_us=0.0, backlash_rad=0.0))
            for joint in leg.joints
        )
        legs.append(replace(leg, joints=(roll, hip, knee)))
    return replace(robot, legs=tuple(legs))


def leads(trail_s: float | None) -> list[float]:
    """How far the hip of the first leg is commanded ahead, against not trailing at all, tick by tick."""
    ahead, level = Controller(with_trail(trail_s)), Controller(with_trail(0.0))
    found = []
    for controller in (ahead, level):
        controller.walk(0.05, 0.0, 0.0)
    for _ in range(200):
        one, two = ahead.tick(0.01), level.tick(0.01)
        assert one.joints_rad == two.joints_rad
        found.append(one.commanded_rad[0][1] - two.commanded_rad[0][1])
    return found


def test_a_measured_time_is_the_lead_over_the_speed_at_the_end_of_a_tick() -> None:
    """Which is the mean speed, half a tick old, carried on as it has changed since the tick before."""
    controller = Controller(with_trail(0.0))
    controller.walk(0.05, 0.0, 0.0)
    hips = [controller.tick(0.01).joints_rad[0][1] for _ in range(200)]
    for tick, lead in list(enumerate(leads(0.02)))[50:]:
        mean, before = ((hips[at] - hips[at - 1]) / 0.01 for at in (tick, tick - 1))
        assert lead == pytest.approx(0.02 * (mean + 0.5 * (mean - before)), abs=1e-12)


def test_that_speed_is_nearer_to_the_truth_than_the_mean() -> None:
    """By a walk in ticks of a tenth: half of the time at least twice as near."""
    controller = Controller(with_trail(0.0))
    controller.walk(0.05, 0.0, 0.0)
    hips = [controller.tick(0.001).joints_rad[0][1] for _ in range(2000)]
    with_change, mean = [], []
    for tick, lead in list(enumerate(leads(0.02)))[50:-1]:
        end = 10 * tick + 9
        true = (hips[end + 1] - hips[end - 1]) / 0.002
        with_change.append(abs(lead / 0.02 - true))
        mean.append(abs((hips[end] - hips[end - 10]) / 0.01 - true))
    assert median(with_change) < 0.5 * median(mean)


def test_unmeasured_it_is_the_slope_of_the_torque_speed_line_over_the_stiffness() -> None:
    servo = juniper().legs[0].joints[1].servo
    assert servo.stiffness_nm_rad is not None
    derived = servo.torque_nm / servo.speed_rad_s / servo.stiffness_nm_rad
    assert leads(None) == pytest.approx(leads(derived), abs=1e-12)
