"""Where the mass is, and where the feet must stand for it; m, kg, body frame; no state.

The robot is a set of point masses (`hobnail.robot.Body`, `Leg`).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from hobnail.motion.leg import LegKinematics
from hobnail.motion.support import support_centre
from hobnail.robot import Leg, Robot, Vec2, Vec3

GRAVITY_M_S2 = 9.81


def centre_of_mass(robot: Robot, joints_rad: Sequence[Sequence[float]]) -> Vec3:
    """Centre of mass of the whole robot (body frame, m) for joint angles per leg."""
    parts: list[tuple[float, Vec3]] = [(robot.body.mass_kg, robot.body.com_m)]
    for leg, angles in zip(robot.legs, joints_rad, strict=True):
        parts += link_masses(leg, LegKinematics(leg), angles)
    total = sum(mass for mass, _ in parts)
    x, y, z = (sum(mass * at[axis] for mass, at in parts) / total for axis in range(3))
    return x, y, z


def link_masses(leg: Leg, kinematics: LegKinematics, angles: Sequence[float]) -> list[tuple[float, Vec3]]:
    """Mass (kg) and place (body frame, m) of the hip, the upper and the lower link."""
    roll, hip, knee = angles
    axis = (0.0, leg.abduction_m * math.cos(roll), leg.abduction_m * math.sin(roll))
    knee_at = kinematics.knee_point(roll, hip)
    foot_at = kinematics.foot(roll, hip, knee)
    parts = []
    for mass, near, far in (
        (leg.hip_kg, axis, axis),
        (leg.upper_kg, axis, knee_at),
        (leg.lower_kg, knee_at, foot_at),
    ):
        x, y, z = (h + 0.5 * (a + b) for h, a, b in zip(leg.hip_m, near, far, strict=True))
        parts.append((mass, (x, y, z)))
    return parts


def neutral_feet(robot: Robot) -> list[Vec2]:
    """Foot points (body frame, x and y, m) of the neutral stance, leg by leg.

    Feet stand below their hip pitch axes, spread outward as configured, and all
    moved alike so that the centre of mass, legs included, lies over the centre
    of the first gait's supports.  Legs out of reach count as hanging straight.
    """
    gait = robot.gaits[0]
    stance = robot.stance
    base = [
        (
            leg.hip_m[0] + stance.forward_m,
            leg.hip_m[1]
            + leg.abduction_m
            + math.copysign(1.0, leg.abduction_m or leg.hip_m[1]) * stance.spread_m,
        )
        for leg in robot.legs
    ]
    legs = [LegKinematics(leg) for leg in robot.legs]
    shift = (0.0, 0.0)
    for _ in range(12):
        feet = [(x + shift[0], y + shift[1]) for x, y in base]
        joints = []
        for leg, kinematics, (x, y) in zip(robot.legs, legs, feet, strict=True):
            at = (
                x - leg.hip_m[0],
                y - leg.hip_m[1],
                leg.foot_radius_m - stance.height_m - leg.hip_m[2],
            )
            joints.append(kinematics.angles(*kinematics.nearest_reachable(*at)))
        com = centre_of_mass(robot, joints)
        centre = support_centre(feet, gait.duty, gait.phases)
        step = (com[0] + stance.forward_m - centre[0], com[1] - centre[1])
        shift = (shift[0] + step[0], shift[1] + step[1])
    return [(x + shift[0], y + shift[1]) for x, y in base]
