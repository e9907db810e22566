"""What a robot can do before it is switched on: the real controller walked over the envelope; SI units.

Geometry, servo speed and static balance only: nothing here knows of friction,
torque or a push.  `hobnail rehearse` does.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

from hobnail.controller import Controller, Tick
from hobnail.motion.balance import centre_of_mass
from hobnail.motion.support import stability_margin
from hobnail.robot import Robot, Vec3

WALK_S = 4.0  # long enough for the slowest cycle to come round once
LOOK_EVERY = 3  # ticks between looks at the balance, which is slow to compute
REACHED = 0.98  # of the command: less counts as not reached


@dataclass(frozen=True, slots=True, kw_only=True)
class Walked:
    """One command walked with one gait."""

    asked: Vec3  # vx, vy (m/s), yaw rate (rad/s)
    done: Vec3  # the mean over the last second
    share: float  # of the command that was reached
    slowdown: float  # least
    joint_speed: float  # greatest, as a share of what the servo may be asked for
    margin_m: float  # least static margin of the centre of mass over the feet on the ground
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
        """Least static margin; negative where the walk balances only in motion."""
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
    """Walk every gait over the border of the envelope."""
    standing = Controller(robot).tick(robot.period_s)
    gaits = tuple(
        GaitCheck(name=gait.name, walks=tuple(_walk(robot, gait.name, twist) for twist in _border(robot)))
        for gait in robot.gaits
    )
    return Check(
        robot=robot,
        standing_margin_m=_margin(robot, standing),
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
    slowdown, speed, margin_m = 1.0, 0.0, math.inf
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
            margin_m = min(margin_m, _margin(robot, tick))
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
        margin_m=margin_m,
        clamped=clamped,
        out_of_reach=out_of_reach,
    )


def _margin(robot: Robot, tick: Tick) -> float:
    """Static margin (m) of the level body: the centre of mass over the feet that stand."""
    x, y, _ = centre_of_mass(robot, tick.joints_rad)
    down = [(foot[0], foot[1]) for foot, stands in zip(tick.feet_m, tick.stance, strict=True) if stands]
    return stability_margin(down, (x, y))


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
        if gait.margin_m < 0.0 and robot.gait(gait.name).body_shift > 0.0:
            found.append(
                f"{name} shifts the body over its support, but at its fastest balances only in motion "
                f"(margin {gait.margin_m * 1000:.0f} mm); walk it slower, or raise its duty or cycle_range_s"
            )
    return found
