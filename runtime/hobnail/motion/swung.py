"""How a leg's masses move with its foot: momentum and angular momentum; kg, kg m, body frame.

To first order about the neutral stance: a foot that is accelerated ahead, left or up takes
its links along, each as far as the leg's geometry has it.  A knee may go another way than
its foot: of a leg that swings out, it goes fore or aft, which turns the robot.
"""

from __future__ import annotations

from hobnail.motion.balance import link_masses
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Leg, Vec3

Matrix = tuple[Vec3, Vec3, Vec3]
STEP_M = 1e-4  # of the differences


class SwungLeg:
    """A leg about its neutral foot; columns are the foot's way ahead, left and up.

    `momentum_kg` times the foot's velocity is the momentum of the links, `angular_kg_m` times
    it their angular momentum about the point on the ground below the body origin.
    """

    __slots__ = ("angular_kg_m", "momentum_kg")

    def __init__(self, leg: Leg, kinematics: LegKinematics, from_hip_m: Vec3, height_m: float) -> None:
        """`from_hip_m` is the neutral foot relative to the hip, `height_m` that of the body origin."""

        def links(foot: Vec3) -> list[tuple[float, Vec3]]:
            return link_masses(leg, kinematics, kinematics.angles(*kinematics.nearest_reachable(*foot)))

        momentum = [[0.0] * 3 for _ in range(3)]
        angular = [[0.0] * 3 for _ in range(3)]
        x, y, z = from_hip_m
        places = [place for _, place in links(from_hip_m)]
        for way, (dx, dy, dz) in enumerate(((STEP_M, 0.0, 0.0), (0.0, STEP_M, 0.0), (0.0, 0.0, STEP_M))):
            to, back = links((x + dx, y + dy, z + dz)), links((x - dx, y - dy, z - dz))
            for (kg, after), (_, before), at in zip(to, back, places, strict=True):
                p = [kg * (a - b) / (2.0 * STEP_M) for a, b in zip(after, before, strict=True)]
                r = (at[0], at[1], at[2] + height_m)
                for axis in range(3):
                    one, two = (axis + 1) % 3, (axis + 2) % 3
                    momentum[axis][way] += p[axis]
                    angular[axis][way] += r[one] * p[two] - r[two] * p[one]
        self.momentum_kg = _matrix(momentum)
        self.angular_kg_m = _matrix(angular)


def _matrix(rows: list[list[float]]) -> Matrix:
    (a, b, c), (d, e, f), (g, h, i) = rows
    return (a, b, c), (d, e, f), (g, h, i)
