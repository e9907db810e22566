"""A trot as simple as beginners write it, for comparisons: foot paths only, no feed-forward; m, s, rad.

It drives the same physics as the rehearsal does, without hobnail's motion.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from hobnail.motion.balance import neutral_feet
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Robot
from hobnail.workshop.rehearse.measures import twist_between
from hobnail.workshop.rehearse.plant import Plant

Floats = npt.NDArray[np.float64]
KEYFRAMES = ((0.0, 0.0, 0.0), (0.25, 0.15, 0.8), (0.5, 0.5, 1.0), (0.75, 0.85, 0.8), (1.0, 1.0, 0.0))
PERIOD_S = 0.01
DIAGONAL = (0.0, 0.5, 0.5, 0.0)


@dataclass(frozen=True, slots=True)
class Outcome:
    """`twist` is what was walked; `slip_m` what each foot slid on average; `jolt_m_s2` the root mean
    square of the trunk's acceleration over 10 ms."""

    twist: tuple[float, float, float]
    slip_m: float
    jolt_m_s2: float


def trot(
    robot: Robot,
    *,
    vx: float = 0.0,
    yaw_rate: float = 0.0,
    cycle_s: float = 0.5,
    duty: float = 0.6,
    lift_m: float = 0.02,
    interpolated: bool = True,
    arcs: bool = True,
    duration_s: float = 6.0,
) -> Outcome:
    """Walk; `interpolated` False jumps from keyframe to keyframe, `arcs` False leads each standing
    foot along the tangent of its arc."""
    plant = Plant(robot)
    legs = [LegKinematics(leg) for leg in robot.legs]
    neutral = neutral_feet(robot)

    def angles(t: float, walking: float) -> list[float]:
        flat: list[float] = []
        for leg, kinematics, (x, y), phase in zip(robot.legs, legs, neutral, DIAGONAL, strict=True):
            p = (t / cycle_s - phase) % 1.0
            if p < duty:
                ahead_s, lift = (0.5 - p / duty) * duty * cycle_s, 0.0
            else:
                travel, lift = _swing((p - duty) / (1 - duty), interpolated=interpolated)
                ahead_s = (travel - 0.5) * duty * cycle_s
            # Where a point of the ground is that will be under the neutral place in `ahead_s`.
            ahead_s *= walking
            if arcs:
                turn = yaw_rate * ahead_s
                c, s = math.cos(turn), math.sin(turn)
                fx, fy = c * x - s * y + vx * ahead_s, s * x + c * y
            else:
                fx, fy = x + (vx - yaw_rate * y) * ahead_s, y + yaw_rate * x * ahead_s
            z = leg.foot_radius_m + walking * lift_m * lift - robot.stance.height_m
            flat += kinematics.angles(fx - leg.hip_m[0], fy - leg.hip_m[1], z - leg.hip_m[2])
        return flat

    plant.place(angles(0.0, 0.0))
    poses, velocities, slip = [], [], 0.0
    ticks = round(duration_s / PERIOD_S)
    for tick in range(ticks):
        t = tick * PERIOD_S
        plant.command(angles(t, min(1.0, t)))
        plant.advance(10)
        probe = plant.probe()
        if t >= 2.0:
            heading = math.atan2(probe.rotation[1, 0], probe.rotation[0, 0])
            poses.append((probe.position_m[0], probe.position_m[1], heading))
            velocities.append(probe.velocity_m_s)
            slip += float(np.mean(probe.foot_slip_m_s)) * PERIOD_S
    path = np.array(poses)
    path[:, 2] = np.unwrap(path[:, 2])
    cycle = round(cycle_s / PERIOD_S)
    marks = path[::cycle]
    twists = np.array([twist_between(a, b, cycle * PERIOD_S) for a, b in pairwise(marks)])
    jolts = np.diff(np.array(velocities), axis=0) / PERIOD_S
    vx_mean, vy_mean, yaw_mean = (float(value) for value in twists.mean(axis=0))
    return Outcome((vx_mean, vy_mean, yaw_mean), slip, float(np.sqrt(np.mean(np.sum(jolts**2, axis=1)))))


def _swing(u: float, *, interpolated: bool) -> tuple[float, float]:
    times: Sequence[float] = [time for time, _, _ in KEYFRAMES]
    if not interpolated:
        # The servo is sent straight to the keyframe that comes next.
        _, travel, lift = next(frame for frame in KEYFRAMES if frame[0] >= u)
        return travel, lift
    travel = float(np.interp(u, times, [frame[1] for frame in KEYFRAMES]))
    lift = float(np.interp(u, times, [frame[2] for frame in KEYFRAMES]))
    return travel, lift
