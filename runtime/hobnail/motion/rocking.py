"""How a body on springy legs rocks in a gait, by cycle time; m, s, rad, N, about the neutral stance.

Servos give way, so the body of a walking robot is a mass on springs, which stands on now
these feet, now those.  While two carry it, it tips over their line like an inverted
pendulum; while the others do, their springs set it upright again, and swing it beyond.
Where that chimes with the cycle, a first tilt grows from step to step (parametric
resonance), until feet that land early catch the body.  Servos that report nothing leave
no feedback to quell it with: only a cycle in which it dies away.

The body is let go with a small tilt and followed over some cycles, for many cycle times at
once: rigid, on feet that are massless springs, which push and do not pull.  Not here:
commands, dead band, feet that slip, legs that weigh.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from hobnail.motion.balance import GRAVITY_M_S2, centre_of_mass, link_masses, neutral_feet
from hobnail.motion.foot_path import FootPath
from hobnail.motion.gaits import fewest_feet_down
from hobnail.motion.leg import LegKinematics
from hobnail.motion.sway import carried
from hobnail.robot import Gait, Joint, Leg, Robot, Vec2, Vec3

FIRST_TILT_RAD = (0.016, 0.012)  # roll and pitch
CYCLES = 5
JUDGED = 1  # the last of them
# Servos are never just as stiff as stated.
STIFFNESSES = (0.8, 1.25)
# Error at which a servo of unknown stiffness drives with all it has; common practice.
PROPORTIONAL_BAND_RAD = 0.1
STEPS = (40, 200)  # of a cycle, fewest and most
# Way of the quickest free motion in one step, rad: what is quicker takes more steps, and
# beyond the most of them is taken to be as slow as they can follow.
STEP_RAD = 1.2
FARTHEST = 10.0  # m, rad, and those a second: of what has fallen
# Of a leg's length: straight legs are as stiff as if they gave way by this.
LEAST_FOLD = 0.05

# What speaks against a cycle, in shares of a miss in speed or tilt (fitted to rehearsals of
# robots made up at random): rocking by so much, and being as short as the pendulum's time.
ROCKING_RAD = math.radians(0.6)
SHORT_COST = 4.0
# Share of the rocking in a cycle next to it that a cycle is charged with.
NEARNESS = 0.5

Array = NDArray[np.float64]


def rocks(gait: Gait) -> bool:
    """Whether the body is at times on too few feet not to tip over them."""
    return gait.body_shift > 0.0 and fewest_feet_down(gait.duty, gait.phases) < 3


def burden(robot: Robot, gait: Gait, cycles_s: tuple[float, ...]) -> Array:
    """What speaks against each of these ascending cycle times: that the body ends up rocking
    in it or in one near to it, and that servos trail more in short cycles."""
    rocking = np.pad(np.array(rocking_rad(robot, gait, cycles_s)), 1, mode="edge")
    rocking = np.maximum(rocking[1:-1], NEARNESS * np.maximum(rocking[:-2], rocking[2:]))
    pendulum_s2 = robot.stance.height_m / GRAVITY_M_S2
    cost: Array = rocking / ROCKING_RAD + SHORT_COST * pendulum_s2 / np.array(cycles_s) ** 2
    return cost


@lru_cache(maxsize=32)
def rocking_rad(robot: Robot, gait: Gait, cycles_s: tuple[float, ...]) -> tuple[float, ...]:
    """What is left of a first tilt, or has become of it, after some cycles: root mean square
    over the last (rad), of the worse stiffness, for each cycle time (s)."""
    times = np.array(cycles_s)
    longest_s = max(cycles_s)
    body = SpringyBody(robot, STEPS[1] * STEP_RAD / longest_s)
    steps = min(max(math.ceil(longest_s * body.quickest_rad_s / STEP_RAD), STEPS[0]), STEPS[1])
    cycle = np.tile(times, (len(STIFFNESSES), 1))[:, :, None]
    loads, lifts, rises = _schedule(gait, steps)
    # By step, stiffness and cycle time: the forces on feet where they should be.
    sent = np.zeros((steps, *cycle.shape[:2], 3 * len(robot.legs)))
    for sent_stiff, stiff in zip(np.moveaxis(sent, 1, 0), STIFFNESSES, strict=True):
        sent_stiff -= stiff * (lifts @ body.raised_n_m)[:, None, :]
        sent_stiff -= (rises @ body.raised_n_s_m)[:, None, :] / times[:, None]
    weight = loads * body.weight_n
    sent[..., 2::3] += weight[:, None, None, :]
    held = np.array([np.vstack((stiff * body.pull, body.drag)) for stiff in STIFFNESSES])
    moves = np.vstack((body.tip, np.zeros((6, 6)), body.push))
    rest = weight @ body.push[2::3]
    # Places, speeds and forces of each case, side by side.
    case = np.zeros((*cycle.shape[:2], 12 + 3 * len(robot.legs)))
    state, place, speed, push = case[..., :12], case[..., :6], case[..., 6:12], case[..., 12:]
    feet_push = push.reshape(*push.shape[:2], -1, 3)
    up = feet_push[..., 2:]
    down, change, step = np.empty(up.shape, dtype=bool), np.empty_like(speed), np.empty_like(place)
    place[..., 3], place[..., 4] = FIRST_TILT_RAD
    time = cycle / steps
    tilt = np.zeros(cycle.shape[:2])
    for count in range(CYCLES):
        # Speeds first, then places by the new speeds: no energy is made.  In place, for this
        # is most of what a plan takes.
        for sent_now, rest_now in zip(sent, rest, strict=True):
            np.matmul(state, held, out=push)
            np.subtract(sent_now, push, out=push)
            np.greater(up, 0.0, out=down)
            np.multiply(feet_push, down, out=feet_push)
            np.matmul(case, moves, out=change)
            np.subtract(change, rest_now, out=change)
            np.multiply(change, time, out=change)
            np.add(speed, change, out=speed)
            np.multiply(time, speed, out=step)
            np.add(place, step, out=place)
            if count >= CYCLES - JUDGED:
                tilt += place[..., 3] ** 2 + place[..., 4] ** 2
        np.clip(state, -FARTHEST, FARTHEST, out=state)
    left = np.sqrt(tilt / (JUDGED * steps)).max(axis=0)
    return tuple(left.tolist())


class SpringyBody:
    """The matrices of the motion about the neutral stance, for rows (x, y, z, roll, pitch, yaw)
    of places and speeds, and of three forces a foot.

    `pull` and `drag`: what the springs and dampers of all feet hold against a place and a
    speed; `raised_n_m`, `raised_n_s_m`: against a foot that is raised by itself; `push`:
    acceleration by the forces; `tip`: by the weight of a body that is not over its feet.
    """

    __slots__ = ("drag", "pull", "push", "quickest_rad_s", "raised_n_m", "raised_n_s_m", "tip", "weight_n")

    def __init__(self, robot: Robot, most_rad_s: float) -> None:
        """`most_rad_s` is the quickest free motion that can be followed."""
        mass = robot.mass_kg
        self.weight_n = mass * GRAVITY_M_S2
        height = robot.stance.height_m
        neutral = neutral_feet(robot)
        angles = [_standing(leg, foot, height) for leg, foot in zip(robot.legs, neutral, strict=True)]
        centre = np.array(centre_of_mass(robot, angles))
        inertia = _inertia(robot, angles, centre)
        count = len(neutral)
        springs, dampers = np.zeros((2, 3 * count, 3 * count))
        moved = np.zeros((3 * count, 6))
        for index, (leg, foot, bent) in enumerate(zip(robot.legs, neutral, angles, strict=True)):
            own = slice(3 * index, 3 * index + 3)
            springs[own, own], dampers[own, own] = _leg(leg, bent)
            arm = np.array([*foot, -height]) - centre
            moved[own] = np.hstack((np.eye(3), -_cross(arm)))
        inverse = np.zeros((6, 6))
        inverse[:3, :3] = np.eye(3) / mass
        inverse[3:, 3:] = np.linalg.inv(inertia)
        self.pull, self.drag = (springs @ moved).T, (dampers @ moved).T
        self.raised_n_m, self.raised_n_s_m = springs[2::3], dampers[2::3]
        self.push = moved @ inverse
        tip = np.zeros((6, 6))
        tip[3:, :3] = _cross(np.array([0.0, 0.0, self.weight_n]))
        self.tip = (inverse @ tip).T
        swings = math.sqrt(np.abs(np.linalg.eigvals(self.pull @ self.push)).max())
        dies = float(np.abs(np.linalg.eigvals(self.drag @ self.push)).max())
        self.quickest_rad_s = max(swings, dies)
        if self.quickest_rad_s > most_rad_s:
            slower = most_rad_s / self.quickest_rad_s
            self.pull, self.drag = self.pull * slower**2, self.drag * slower
            self.raised_n_m, self.raised_n_s_m = self.raised_n_m * slower**2, self.raised_n_s_m * slower


def _schedule(gait: Gait, steps: int) -> tuple[Array, Array, Array]:
    """Over a cycle, foot by foot: share of the weight, lift (m) and rise (m for each cycle)."""
    clocks = (np.arange(steps) + 0.5) / steps
    since = (clocks[:, None] - np.array(gait.phases)) % 1.0
    loads = carried(since, gait.duty)
    loads /= np.maximum(loads.sum(axis=1, keepdims=True), 1e-9)
    path = FootPath(gait.swing)
    in_air = np.clip((since - gait.duty) / (1.0 - gait.duty), 0.0, 1.0)
    lifts = gait.lift_m * np.array([[path.at(u)[1] for u in row] for row in in_air.tolist()])
    rises = (np.roll(lifts, -1, axis=0) - np.roll(lifts, 1, axis=0)) * (0.5 * steps)
    return loads, lifts, rises


def _standing(leg: Leg, foot: Vec2, height_m: float) -> Vec3:
    """Joint angles of a leg on its neutral foot."""
    (x, y), (hip_x, hip_y, hip_z) = foot, leg.hip_m
    kinematics = LegKinematics(leg)
    a, b, c = kinematics.angles(
        *kinematics.nearest_reachable(x - hip_x, y - hip_y, leg.foot_radius_m - height_m - hip_z)
    )
    return a, b, c


def _leg(leg: Leg, angles: Vec3) -> tuple[Array, Array]:
    """Stiffness (N/m) and damping (N s/m) of a foot against its hip."""
    roll, hip, knee = angles
    kinematics = LegKinematics(leg)
    axis = np.array([0.0, math.cos(roll), math.sin(roll)])  # of hip and knee
    at_foot = np.array(kinematics.foot(roll, hip, knee))
    at_hip = leg.abduction_m * axis
    at_knee = np.array(kinematics.knee_point(roll, hip))
    turns = np.column_stack(
        (
            np.cross((1.0, 0.0, 0.0), at_foot),
            np.cross(axis, at_foot - at_hip),
            np.cross(axis, at_foot - at_knee),
        )
    )
    least = LEAST_FOLD * (leg.upper_m + leg.lower_m)
    left, sizes, right = np.linalg.svd(turns)
    back = right.T @ np.diag(1.0 / np.maximum(sizes, least)) @ left.T
    springs = np.diag([_stiffness(joint) for joint in leg.joints])
    dampers = np.diag([joint.servo.torque_nm / joint.servo.speed_rad_s for joint in leg.joints])
    return back.T @ springs @ back, back.T @ dampers @ back


def _stiffness(joint: Joint) -> float:
    servo = joint.servo
    return servo.stiffness_nm_rad or servo.torque_nm / PROPORTIONAL_BAND_RAD


def _inertia(robot: Robot, angles: Sequence[Vec3], centre: Array) -> Array:
    """Inertia (kg m^2) about the centre of mass: the trunk a box, links points."""
    body = robot.body
    x, y, z = body.size_m
    box = np.diag([y * y + z * z, x * x + z * z, x * x + y * y]) * (body.mass_kg / 12.0)
    parts: list[tuple[float, Vec3]] = [(body.mass_kg, body.com_m)]
    for leg, bent in zip(robot.legs, angles, strict=True):
        parts += link_masses(leg, LegKinematics(leg), bent)
    inertia: Array = box
    for mass, at in parts:
        arm = _cross(np.array(at) - centre)
        inertia = inertia - mass * (arm @ arm)
    return inertia


def _cross(arm: Array) -> Array:
    """The matrix that multiplies a vector by `arm` from the left."""
    x, y, z = arm
    return np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
