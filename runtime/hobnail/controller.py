"""The controller: commands in, one `Tick` of angles and pulses out; pure.

It reads no clock and touches no device: time comes in as `dt_s`, and the same
calls give bit-identical results.  Motion is `hobnail.motion.walker`; this adds
the pulses of the calibrated servos, makes the feet do what truly gives the motion
that is asked, and checks what it is asked.
"""

from __future__ import annotations

import math
from itertools import chain
from typing import NamedTuple

from hobnail.errors import CommandError
from hobnail.motion.joint_steps import STEP_SHARE
from hobnail.motion.plan import joint_speeds_rad_s
from hobnail.motion.planar import Pose, compose, to_origin
from hobnail.motion.recurrence import Recurrence
from hobnail.motion.walker import Walker
from hobnail.response import AS_MADE, TrueOdometry, feet_twist, true_twist
from hobnail.robot import Robot, Vec3
from hobnail.servo import JointMap

LONGEST_TICK_S = 1.0
GREATEST = 1e6  # of what a command to walk may name, in any unit
LEAST = 1e-9  # m/s, rad/s; a velocity below counts as none


class Tick(NamedTuple):
    """What one tick asks of the robot; legs in the order of `Robot.legs`.

    To drive a model of the robot use `pulses_us` or `commanded_rad`; the
    geometric `joints_rad` and `feet_m` are those of a rigid leg on a pointed foot.
    """

    joints_rad: tuple[Vec3, ...]  # per leg: roll, hip pitch, knee pitch, geometric
    commanded_rad: tuple[Vec3, ...]  # with feed-forward for sag, trailing and round feet
    feet_m: tuple[Vec3, ...]  # body frame: end of the lower link, centre of a round foot
    stance: tuple[bool, ...]  # per leg: on the ground
    pulses_us: tuple[float, ...]  # per joint, in the order of `Robot.joints`
    slowdown: float  # share of dt by which gait and body went on; 1.0 = not slowed
    pose: tuple[float, float, float]  # odometry of the body: x, y (m), yaw (rad)
    velocity: tuple[float, float, float]  # of the walk, as done: vx, vy (m/s), yaw rate (rad/s)
    gait: str
    walking: bool  # a foot is in the air or about to be, or the body moves
    settled: bool  # nothing moves and nothing is about to
    height_m: float  # body origin above the ground
    tilt_rad: tuple[float, float]  # roll and pitch of the body, as far as the posture is taken
    clamped: int  # joints held back by the last hard clamp, off their path
    out_of_reach: int  # feet brought to the nearest reachable point


class Controller:
    """Gait, kinematics and servo mapping of one robot.

    A new controller stands at its neutral stance; `at_rest` it lies at rest
    height.  Not thread-safe: one owner.
    """

    def __init__(self, robot: Robot, *, at_rest: bool = False) -> None:
        self.robot = robot
        self._maps = [JointMap(joint) for joint in robot.joints]
        # Most servos have a straight map, which needs no looking up.
        straight = not any(m.knots_rad for m in self._maps)
        self._lines = [m.pieces[0] for m in self._maps] if straight else None
        limits = [tuple(JointMap(joint).reachable_rad for joint in leg.joints) for leg in robot.legs]
        self._walker = Walker(robot, limits, at_rest=at_rest)
        self._odometry = None if robot.walk == AS_MADE else TrueOdometry(robot.walk)
        self._supply_v = robot.supply.nominal_v
        self._speeds = joint_speeds_rad_s(robot, self._supply_v)
        self._dt_s = 0.0
        self._steps: list[Vec3] = []
        self._recurrence: Recurrence[tuple[Tick, Pose]] = Recurrence()  # by the feet's own odometry

    @property
    def supply_v(self) -> float:
        """Voltage of the servo supply, which bounds how fast the joints may turn (V)."""
        return self._supply_v

    @supply_v.setter
    def supply_v(self, volts: float) -> None:
        if not (math.isfinite(volts) and volts > 0.0):
            raise CommandError(f"supply_v is {volts} V; allowed: more than 0 V")
        if volts == self._supply_v:
            return
        self._take_over()
        self._supply_v = volts
        self._speeds = joint_speeds_rad_s(self.robot, volts)
        self._dt_s = 0.0
        self._walker.slow_supply = max(1.0, self.robot.supply.nominal_v / volts)

    def walk(self, vx: float, vy: float, yaw_rate: float, pivot: tuple[float, float] = (0.0, 0.0)) -> None:
        """Command the body velocity (vx, vy in m/s, yaw_rate in rad/s) of the body's point
        `pivot` (m, body frame).  Too much is scaled down as a whole, so that the curve
        keeps its shape.  Raises CommandError for what is not a finite number."""
        values = {"vx": vx, "vy": vy, "yaw_rate": yaw_rate, "pivot x": pivot[0], "pivot y": pivot[1]}
        for name, value in values.items():
            if not -GREATEST <= value <= GREATEST:
                raise CommandError(f"{name} is {value}; allowed: a finite number, {GREATEST:g} at most")
        vx, vy, yaw_rate = to_origin(vx, vy, yaw_rate, pivot)
        if self._odometry is not None:
            vx, vy, yaw_rate = feet_twist(self._odometry.response, (vx, vy, yaw_rate))
        # No robot moves so little, and squares of it would be rounded to nothing.
        twist = (
            vx if abs(vx) > LEAST else 0.0,
            vy if abs(vy) > LEAST else 0.0,
            yaw_rate if abs(yaw_rate) > LEAST else 0.0,
        )
        if twist != self._walker.wanted:
            self._take_over()
        self._walker.walk(twist)

    def stand(self) -> None:
        """Stop walking: every foot steps to its neutral place, then stands."""
        self.walk(0.0, 0.0, 0.0)

    def gait(self, name: str) -> None:
        """Change the gait, at once when standing, else when the feet in the air are down.
        Raises CommandError for a gait that the robot does not have."""
        try:
            gait = self.robot.gait(name)
        except KeyError:
            names = ", ".join(gait.name for gait in self.robot.gaits)
            raise CommandError(f"gait is {name!r}; allowed: {names}") from None
        self._take_over()
        self._walker.choose_gait(gait)

    def posture(
        self,
        *,
        height_m: float | None = None,
        roll_rad: float | None = None,
        pitch_rad: float | None = None,
        yaw_rad: float | None = None,
        lean_m: tuple[float, float] | None = None,
    ) -> None:
        """Glide the body to a posture over its feet; None leaves a value as it is.
        Raises CommandError, and changes nothing, when a value is out of its range."""
        limits = self.robot.posture_limits
        asked = [height_m, roll_rad, pitch_rad, yaw_rad, *(lean_m or (None, None))]
        bounds = [
            ("height_m", "m", *limits.height_m),
            ("roll_rad", "rad", -limits.roll_rad, limits.roll_rad),
            ("pitch_rad", "rad", -limits.pitch_rad, limits.pitch_rad),
            ("yaw_rad", "rad", -limits.yaw_rad, limits.yaw_rad),
            ("lean_m x", "m", -limits.lean_m, limits.lean_m),
            ("lean_m y", "m", -limits.lean_m, limits.lean_m),
        ]
        target = list(self._walker.posture_target)
        for index, (value, (name, unit, low, high)) in enumerate(zip(asked, bounds, strict=True)):
            if value is None:
                continue
            if not low <= value <= high:
                raise CommandError(f"{name} is {value} {unit}; allowed: {low:g} to {high:g} {unit}")
            target[index] = float(value)
        self._take_over()
        self._walker.set_posture(target)

    def rise(self, within_s: float | None = None) -> None:
        """Raise the body, level, to stance height (within that time, as far as the servos can).
        Raises CommandError for a time that is none."""
        _check_time(within_s)
        self._take_over()
        self._walker.set_posture([self.robot.stance.height_m, 0.0, 0.0, 0.0, 0.0, 0.0], within_s)

    def lower(self, within_s: float | None = None) -> None:
        """Plant the feet, then lower the body, level, to rest height (within that time, as
        far as the servos can).  Raises CommandError for a time that is none."""
        _check_time(within_s)
        self._take_over()
        self._walker.lower(within_s)

    def tick(self, dt_s: float) -> Tick:
        """Go on by `dt_s` (s).  Raises CommandError unless 0 < dt_s <= 1."""
        recurrence = self._recurrence
        if dt_s != self._dt_s:
            if not 0.0 < dt_s <= LONGEST_TICK_S:
                raise CommandError(f"dt_s is {dt_s} s; allowed: more than 0 to {LONGEST_TICK_S:g} s")
            self._take_over()
            self._dt_s = dt_s
            share = dt_s * STEP_SHARE
            self._steps = [(a * share, b * share, c * share) for a, b, c in self._speeds]
        elif recurrence.turning:
            (tick, walked), moved = recurrence.again()
            tick = tick._replace(pose=compose(moved, tick.pose))
            return tick if self._odometry is None else _truly(tick, compose(moved, walked), self._odometry)
        walker = self._walker
        walker.tick(dt_s, self._steps)
        body, commanded = walker.body, walker.feed_forward.commanded_rad
        angles = chain.from_iterable(commanded)
        if self._lines:
            pulses = [
                offset + slope * angle for angle, (offset, slope) in zip(angles, self._lines, strict=True)
            ]
        else:
            pulses = [m.pulse_us(angle) for angle, m in zip(angles, self._maps, strict=True)]
        tick = Tick(
            body.joints_rad,
            commanded,
            body.feet_m,
            walker.stance,
            tuple(pulses),
            walker.slowdown,
            body.pose,
            walker.velocity,
            walker.gait.name,
            walker.walking,
            walker.settled,
            body.height_m,
            body.tilt_rad,
            walker.clamped,
            body.out_of_reach,
        )
        if walker.steady:
            recurrence.keep(walker.start, (tick, walker.pose), walker.cycle_s / dt_s)
        else:
            recurrence.clear()
        return tick if self._odometry is None else _truly(tick, walker.pose, self._odometry)

    def _take_over(self) -> None:
        """Something changes: no tick recurs any more, they are worked out again."""
        if self._recurrence.turning:
            self._walker.go_on_from(self._recurrence.state())
        self._recurrence.clear()


def _truly(tick: Tick, walked: Pose, odometry: TrueOdometry) -> Tick:
    """The tick with what truly happens in place of what the feet make; `walked` is their odometry
    without shift and posture."""
    return tick._replace(
        pose=odometry.pose(walked, tick.pose), velocity=true_twist(odometry.response, tick.velocity)
    )


def _check_time(within_s: float | None) -> None:
    if within_s is not None and not 0.0 < within_s < math.inf:
        raise CommandError(f"within_s is {within_s} s; allowed: more than 0 s")
