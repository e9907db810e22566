"""What a robot can do before it is switched on: the real controller walked over the envelope; SI units.

Geometry, servo speed and balance of the motion as commanded only: nothing here knows
of friction, torque or a push.  `hobnail rehearse` does.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from hobnail.controller import Controller, Tick
from hobnail.motion.balance import GRAVITY_M_S2, centre_of_mass, neutral_feet
from hobnail.motion.rocking import burden, rocking_rad, rocks
from hobnail.motion.steadiness import least_margin
from hobnail.motion.support import stability_margin, support_centre
from hobnail.robot import Gait, Robot, Vec2, Vec3, WalkResponse

WALK_S = 4.0  # long enough for the slowest cycle to come round once
LOOK_EVERY = 3  # ticks between looks at the balance, which is slow to compute
REACHED = 0.98  # of the command: less counts as not reached
# The zero-moment point may be outside the feet by this for moments, as in setting off, before
# a body tips that takes a tenth of a second to begin to fall (common practice).
TIPPING_M = 0.005
# A body that rocks by more on its servos walks badly (our rehearsals).
ROCKING_RAD = math.radians(1.0)
# What is tried to find a calmer trot: duty factors, and cycles as shares of the pendulum's time.
CALMER_DUTIES = (0.6, 0.65, 0.7)
CALMER_TIMES = tuple(2.4 + 0.2 * k for k in range(12))


@dataclass(frozen=True, slots=True, kw_only=True)
class Walked:
    """One command walked with one gait."""

    asked: Vec3  # vx, vy (m/s), yaw rate (rad/s)
    done: Vec3  # the mean over the last second
    share: float  # of the command that was reached
    slowdown: float  # least
    joint_speed: float  # greatest, as a share of what the servo may be asked for
    margin_m: float  # least margin of the zero-moment point inside the feet on the ground
    clamped: int
    out_of_reach: int


@dataclass(frozen=True, slots=True, kw_only=True)
class GaitCheck:
    """One gait over the border of the envelope; `walks` along the axes come first."""

    name: str
    walks: tuple[Walked, ...]

    @property
    def forward_m_s(self) -> float:
        """Speed reached straight ahead."""
        return self.walks[0].done[0]

    @property
    def sideways_m_s(self) -> float:
        """Speed reached to the left."""
        return self.walks[1].done[1]

    @property
    def turn_rad_s(self) -> float:
        """Rate reached turning left on the spot."""
        return self.walks[2].done[2]

    @property
    def share(self) -> float:
        """Least share of a command that was reached."""
        return min(walk.share for walk in self.walks)

    @property
    def joint_speed(self) -> float:
        """Greatest joint speed, as a share of what the servo may be asked for."""
        return max(walk.joint_speed for walk in self.walks)

    @property
    def margin_m(self) -> float:
        """Least margin of the zero-moment point; about zero or less where two feet carry the robot."""
        return min(walk.margin_m for walk in self.walks)

    @property
    def faults(self) -> int:
        """Joints clamped and feet out of reach; 0 where all is well."""
        return sum(walk.clamped + walk.out_of_reach for walk in self.walks)


@dataclass(frozen=True, slots=True, kw_only=True)
class Check:
    """What was found; `warnings` are sentences with the next step."""

    robot: Robot
    standing_margin_m: float
    com_m: Vec3  # body frame, standing
    gaits: tuple[GaitCheck, ...]
    warnings: tuple[str, ...]


def check(robot: Robot) -> Check:
    """Walk every gait over the border of the envelope, by its feet: what a floor makes of that is no part."""
    robot = replace(robot, walk=WalkResponse())
    standing = Controller(robot).tick(robot.period_s)
    com, down = _look(robot, standing)
    gaits = tuple(
        GaitCheck(name=gait.name, walks=tuple(_walk(robot, gait.name, twist) for twist in _border(robot)))
        for gait in robot.gaits
    )
    return Check(
        robot=robot,
        standing_margin_m=stability_margin(down, (com[0], com[1])),
        com_m=centre_of_mass(robot, standing.joints_rad),
        gaits=gaits,
        warnings=tuple(_warnings(robot, gaits)),
    )


def _border(robot: Robot) -> list[Vec3]:
    """Commands on the border of the ellipsoid: the three axes, their reverse, and between them."""
    envelope = robot.envelope
    signs = sorted(itertools.product((0, 1, -1), repeat=3), key=lambda s: (sum(map(abs, s)), s[::-1]))
    axes = [(1, 0, 0), (0, 1, 0), (0, 0, 1)]
    directions = [*axes, *(s for s in signs if any(s) and s not in axes)]
    return [
        (
            envelope.forward_m_s * x / length,
            envelope.sideways_m_s * y / length,
            envelope.turn_rad_s * w / length,
        )
        for x, y, w in directions
        for length in (math.sqrt(x * x + y * y + w * w),)
    ]


def _walk(robot: Robot, gait: str, twist: Vec3) -> Walked:
    controller = Controller(robot)
    controller.gait(gait)
    controller.walk(*twist)
    period_s = robot.period_s
    allowed = [
        joint.servo.speed_rad_s * joint.servo.usable_speed * robot.supply.nominal_v / joint.servo.rated_v
        for joint in robot.joints
    ]
    slowdown, speed = 1.0, 0.0
    looks: list[Look] = []
    clamped = out_of_reach = 0
    ticks = round(WALK_S / period_s)
    last = round(1.0 / period_s)
    mean = [0.0, 0.0, 0.0]
    before: list[float] = []
    for k in range(ticks):
        tick = controller.tick(period_s)
        angles = [angle for leg in tick.commanded_rad for angle in leg]
        for old, new, most in zip(before, angles, allowed, strict=False):
            speed = max(speed, abs(new - old) / (period_s * most))
        before = angles
        slowdown = min(slowdown, tick.slowdown)
        clamped += tick.clamped
        out_of_reach += tick.out_of_reach
        if k % LOOK_EVERY == 0:
            looks.append(_look(robot, tick))
        if k >= ticks - last:
            mean = [total + value / last for total, value in zip(mean, tick.velocity, strict=True)]
    share = min(
        (done / asked for done, asked in zip(mean, twist, strict=True) if asked), default=1.0
    )  # the controller scales a command as a whole
    return Walked(
        asked=twist,
        done=(mean[0], mean[1], mean[2]),
        share=share,
        slowdown=slowdown,
        joint_speed=speed,
        margin_m=zero_moment_margin(looks, LOOK_EVERY * period_s),
        clamped=clamped,
        out_of_reach=out_of_reach,
    )


# The centre of mass (ground frame, m) and the feet on the ground at one instant.
Look = tuple[Vec3, list[Vec2]]


def _look(robot: Robot, tick: Tick) -> Look:
    """At a level body."""
    x, y, yaw = tick.pose
    c, s = math.cos(yaw), math.sin(yaw)

    def on_ground(point: Vec3) -> Vec3:
        return x + c * point[0] - s * point[1], y + s * point[0] + c * point[1], tick.height_m + point[2]

    feet = zip(tick.feet_m, tick.stance, strict=True)
    down = [on_ground(foot)[:2] for foot, stands in feet if stands]
    return on_ground(centre_of_mass(robot, tick.joints_rad)), down


def zero_moment_margin(looks: Sequence[Look], every_s: float) -> float:
    """Least margin (m) of the zero-moment point, z/g times the acceleration of the centre of mass
    behind it (Vukobratovic & Borovac 2004; memory), by differences between looks."""
    least = math.inf
    for (before, _), (com, down), (after, _) in zip(looks, looks[1:], looks[2:], strict=False):
        share = com[2] / (GRAVITY_M_S2 * every_s**2)
        x, y, _ = (b - share * (c - 2.0 * b + a) for a, b, c in zip(before, com, after, strict=True))
        least = min(least, stability_margin(down, (x, y)))
    return least


def _warnings(robot: Robot, gaits: tuple[GaitCheck, ...]) -> list[str]:
    found = []
    for index, gait in enumerate(gaits):
        name = f"gait {gait.name}"
        if gait.faults:
            found.append(
                f"{name}: within the envelope, joints were clamped or feet out of reach {gait.faults} times; "
                "make the envelope or the lift smaller, or the stance lower"
            )
        elif gait.share < REACHED and index == 0:
            found.append(
                f"{name}, which walking starts with, reaches only {gait.share:.0%} of the envelope; "
                "make the envelope smaller, or use faster servos"
            )
        if gait.margin_m < -TIPPING_M and _is_steady(robot, robot.gait(gait.name)):
            found.append(
                f"{name} has three feet or more down at any time, but at its fastest tips by "
                f"{-gait.margin_m * 1000:.0f} mm; walk it slower, or raise its duty or cycle_range_s"
            )
    found += _rocking(robot, robot.gaits[0])
    return found


def _rocking(robot: Robot, gait: Gait) -> list[str]:
    """What is to be told of a gait in all of whose cycles the body rocks on its servos."""
    if not rocks(gait):
        return []
    low, high = gait.cycle_range_s
    own = (gait.cycle_s,) if gait.cycle_s else tuple(low + k / 4 * (high - low) for k in range(5))
    least = min(rocking_rad(robot, gait, own))
    if least <= ROCKING_RAD:
        return []
    pendulum_s = math.sqrt(robot.stance.height_m / GRAVITY_M_S2)
    times = tuple(share * pendulum_s for share in CALMER_TIMES)
    _, duty, cycle_s = min(
        (cost, duty, cycle_s)
        for duty in CALMER_DUTIES
        for cost, cycle_s in zip(burden(robot, replace(gait, duty=duty), times).tolist(), times, strict=True)
    )
    (calmer,) = rocking_rad(robot, replace(gait, duty=duty), (cycle_s,))
    told = f"gait {gait.name}: on its servos' springs the body rocks by about {math.degrees(least):.1f} deg"
    if calmer > 0.5 * least:
        return [f"{told}, and would in other cycles; use stiffer servos"]
    return [
        f"{told}; with duty {duty:g} and cycle_s {cycle_s:.2f} it would by about "
        f"{math.degrees(calmer):.1f}: rehearse that, or use stiffer servos"
    ]


def _is_steady(robot: Robot, gait: Gait) -> bool:
    """Whether the gait balances on the spot at any time."""
    feet = neutral_feet(robot)
    first = robot.gaits[0]
    return least_margin(feet, gait, support_centre(feet, first.duty, first.phases), (0.0, 0.0, 0.0)) > 0.0
