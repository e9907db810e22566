"""Where the mass is and where the feet and body should be for it; m, kg, s; no state.

The robot is a set of point masses (`hobnail.robot`); walking is planned with
the linear inverted pendulum of constant height (Kajita et al. 2001).
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence

from hobnail.motion.leg import LegKinematics
from hobnail.motion.support import support_centre, support_centroids
from hobnail.robot import Gait, Robot, Vec2, Vec3

GRAVITY_M_S2 = 9.81
SWAY_HARMONICS = 4


def centre_of_mass(robot: Robot, joints_rad: Sequence[Sequence[float]]) -> Vec3:
    """Centre of mass of the whole robot (body frame, m) for joint angles per leg."""
    parts: list[tuple[float, Vec3]] = [(robot.body.mass_kg, robot.body.com_m)]
    for leg, (roll, hip, knee) in zip(robot.legs, joints_rad, strict=True):
        kinematics = LegKinematics(leg)
        c, s = math.cos(roll), math.sin(roll)
        axis = (0.0, leg.abduction_m * c, leg.abduction_m * s)
        knee_at = kinematics.knee_point(roll, hip)
        foot_at = kinematics.foot(roll, hip, knee)
        for mass, near, far in (
            (leg.hip_kg, axis, axis),
            (leg.upper_kg, axis, knee_at),
            (leg.lower_kg, knee_at, foot_at),
        ):
            x, y, z = (h + 0.5 * (a + b) for h, a, b in zip(leg.hip_m, near, far, strict=True))
            parts.append((mass, (x, y, z)))
    total = sum(mass for mass, _ in parts)
    x, y, z = (sum(mass * at[axis] for mass, at in parts) / total for axis in range(3))
    return x, y, z


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
            leg.hip_m[1] + leg.abduction_m + math.copysign(stance.spread_m, leg.abduction_m or leg.hip_m[1]),
        )
        for leg in robot.legs
    ]
    legs = [LegKinematics(leg) for leg in robot.legs]
    shift = (0.0, 0.0)
    for _ in range(6):
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


class Sway:
    """The body's shift over its changing supports, periodic in the gait clock.

    The wanted zero-moment point is the centroid of the standing feet.  Its
    Fourier series, term by term divided by 1 + (z/g) w^2, is the one periodic
    motion of the linear inverted pendulum with that zero-moment point: slow
    gaits move the body right over the support before a foot lifts, quick ones
    hardly at all.
    """

    __slots__ = ("_height_term", "_terms", "active")

    def __init__(self, feet: Sequence[Vec2], gait: Gait, height_m: float) -> None:
        self._terms: list[tuple[complex, complex]] = []
        pieces = support_centroids(feet, gait.duty, gait.phases)
        for k in range(1, SWAY_HARMONICS + 1):
            turn = -2j * math.pi * k
            weight_x = weight_y = 0j
            for start, length, (x, y) in pieces:
                wave = (cmath.exp(turn * (start + length)) - cmath.exp(turn * start)) / turn
                weight_x += x * wave
                weight_y += y * wave
            self._terms.append((2.0 * gait.body_shift * weight_x, 2.0 * gait.body_shift * weight_y))
        self._height_term = height_m / GRAVITY_M_S2 * (2.0 * math.pi) ** 2
        self.active = any(abs(x) + abs(y) > 1e-4 for x, y in self._terms)

    def at(self, clock: float, rate_hz: float) -> Vec2:
        """Shift (m, along the body's x and y) at a time of the cycle, at a cycle rate."""
        turn = cmath.exp(2j * math.pi * clock)
        stiff = self._height_term * rate_hz * rate_hz
        wave = 1.0 + 0j
        x = y = 0.0
        for k, (term_x, term_y) in enumerate(self._terms, 1):
            wave *= turn
            share = wave / (1.0 + stiff * k * k)
            x += (term_x * share).real
            y += (term_y * share).real
        return x, y
