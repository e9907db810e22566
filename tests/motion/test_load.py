"""Feed-forward against virtual work done by numbers: the servos' torques are the slopes of the
leg's potential energy and of the push on its foot."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from hobnail.motion.leg import LegKinematics
from hobnail.motion.load import LegCorrection, half_dead_band_rad
from hobnail.robot import Leg, Robot, Vec3
from workshop.machines import burdock, thistle

G = 9.81


def foot_of(leg: Leg, q: Vec3) -> Vec3:
    return LegKinematics(leg).foot(*q)


def potential_j(leg: Leg, q: Vec3) -> float:
    """Of the links' weights, which sit midway along them; the hip's at the pitch axis."""
    roll = q[0]
    axis_z = leg.abduction_m * math.sin(roll)
    knee_z = float(LegKinematics(leg).knee_point(roll, q[1])[2])
    foot_z = foot_of(leg, q)[2]
    return G * (
        leg.hip_kg * axis_z + leg.upper_kg * (axis_z + knee_z) / 2 + leg.lower_kg * (knee_z + foot_z) / 2
    )


def torque_by_numbers(leg: Leg, q: Vec3, force: Vec3) -> list[float]:
    """What the servos must bear: the slope of the potential less the push's work, joint by joint."""
    torques = []
    step = 1e-6
    for joint in range(3):
        up, down = list(q), list(q)
        up[joint] += step
        down[joint] -= step
        high, low = (up[0], up[1], up[2]), (down[0], down[1], down[2])
        work = np.dot(force, np.subtract(foot_of(leg, high), foot_of(leg, low)))
        torques.append((potential_j(leg, high) - potential_j(leg, low) - float(work)) / (2 * step))
    return torques


def correction(leg: Leg) -> LegCorrection:
    return LegCorrection(leg, LegKinematics(leg), (0.0, 0.0, 0.0))


@pytest.mark.parametrize("robot", [thistle(), burdock()], ids=lambda robot: robot.name)
@pytest.mark.parametrize("force", [(0.0, 0.0, 0.0), (0.0, 0.0, 9.0), (2.0, -1.5, 7.0)])
def test_torques_are_those_of_virtual_work(robot: Robot, force: Vec3) -> None:
    for leg in (replace(leg, foot_radius_m=0.0) for leg in robot.legs):
        q = (0.1, -0.5 * leg.knee, 1.1 * leg.knee)
        _, y, z = foot_of(leg, q)
        angles, torques = correction(leg).apply(*q, y, z, force)
        assert torques == pytest.approx(torque_by_numbers(leg, q, force), abs=1e-6)
        stiffness = leg.joints[0].servo.stiffness_nm_rad
        assert stiffness is not None
        gained = np.subtract(angles, q)
        assert gained == pytest.approx(np.array(torques) / stiffness, abs=1e-12)


def test_an_unknown_stiffness_is_not_compensated() -> None:
    leg = thistle().legs[0]
    servo = replace(leg.joints[0].servo, stiffness_nm_rad=None)
    roll, hip, knee = (replace(joint, servo=servo) for joint in leg.joints)
    plain = correction(replace(leg, joints=(roll, hip, knee), foot_radius_m=0.0))
    assert not plain.active
    assert plain.slack_rad == (0.0, 0.0, 0.0)
    assert plain.trail_s == (0.0, 0.0, 0.0)


def test_half_a_dead_band_is_half_its_pulse_width_on_the_map() -> None:
    joint = burdock().joints[0]  # 5 us wide, 2000 us for half a turn
    assert half_dead_band_rad(joint) == pytest.approx(math.pi * 2.5 / 2000)


def test_slack_is_half_of_dead_band_and_backlash() -> None:
    leg = thistle().legs[0]
    roll, hip, knee = (replace(joint, servo=replace(joint.servo, backlash_rad=0.01)) for joint in leg.joints)
    slack = correction(replace(leg, joints=(roll, hip, knee))).slack_rad
    assert slack == pytest.approx([half_dead_band_rad(roll) + 0.005] * 3)
