"""Routes by dead reckoning: the runner that walks steps (m, rad, s) from the odometry.

Pure: no clock, no file, no device.
Dead reckoning is not localisation: where the feet slip, the robot is off by
what it slipped, and the runner cannot know.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from hobnail.errors import CommandError
from hobnail.motion.planar import compose, exp_twist
from hobnail.robot import Robot, Vec3
from hobnail.service.route_steps import ChangeGait, Move, Pose, Speed, Step, Wait, misfits

if TYPE_CHECKING:
    from hobnail.controller import Tick

STILL: Vec3 = (0.0, 0.0, 0.0)

POSITION_TOLERANCE_M = 0.001  # half of what is promised (2 mm), so that the rest may drift
HEADING_TOLERANCE_RAD = math.radians(0.1)  # half of 0.2 degrees
STILL_M_S = 0.003
STILL_RAD_S = math.radians(1.0)
FEEDBACK_PER_S = 3.0  # share of the error that is taken back a second
LAG_M = 0.03  # so far behind the reference, or so far turned away, the reference waits
LAG_RAD = math.radians(5.0)
ACCELERATION_SHARE = 0.7  # of the envelope's, so that feedback has some left
DEFAULT_SPEED = 0.8
TIMEOUT_FACTOR = 4.0  # a step may take so many times what it should ...
TIMEOUT_S = 15.0  # ... and so many seconds more


@dataclass(frozen=True, slots=True, kw_only=True)
class Action:
    """What the controller is to do in the coming tick: apply `gait` and `posture` when they
    are given, then walk `twist` (vx, vy in m/s, yaw rate in rad/s, at the body origin)."""

    twist: Vec3 = (0.0, 0.0, 0.0)
    posture: dict[str, object] = field(default_factory=dict)
    gait: str | None = None


class RouteRunner:
    """Walks a list of steps; call `update` once a tick with the tick just done.

    Each step ends standing, and its goal hangs on the goal of the step before,
    not on where the robot came to stand, so errors do not add up.  Along a
    step a reference runs ahead with the envelope's acceleration; the robot gets
    the reference's velocity and takes back a share of its distance from it.
    Reckoned is the walk, from `Tick.velocity`: sway and posture move the body over its
    feet, but lead it nowhere.  A step that does not end in time ends the route;
    `failure` then says which step and why.
    """

    def __init__(self, steps: Sequence[Step], robot: Robot) -> None:
        """Raises CommandError when there is no step, or one does not fit the robot."""
        problems = [
            f"step {k} asks for {found}, {robot.name} allows {allowed}"
            for k, step in enumerate(steps, 1)
            for _, (found, allowed) in misfits(step, robot)
        ]
        if not steps:
            problems = ["the route has no steps: give at least one"]
        if problems:
            raise CommandError("; ".join(problems))
        self.steps = tuple(steps)
        self.failure = ""
        self.index = 0
        self.twist: Vec3 = STILL  # last asked for
        self._robot = robot
        self._expected_s = expected_seconds(self.steps, robot)
        self._elapsed_s = 0.0
        self._speed = DEFAULT_SPEED
        self._place: Vec3 = STILL  # reckoned from the start of the route; yaw is not wrapped
        self._pace: Vec3 = STILL
        self._goal: Vec3 = STILL
        self._standing = False  # standing came before the first step
        self._begin()

    @property
    def done(self) -> bool:
        """Nothing more will be asked for: the route is walked, or failed."""
        return bool(self.failure) or self.index == len(self.steps)

    def update(self, tick: Tick, dt_s: float) -> Action:
        """The action for the next tick; standing still once done."""
        if self.done:
            return Action()
        self._reckon(tick, dt_s)
        self._elapsed_s += dt_s
        self._step_s += dt_s
        timeout_s = TIMEOUT_S + TIMEOUT_FACTOR * self._expected_s[self.index]
        if self._step_s > timeout_s:
            self._fail(timeout_s, tick)
            action = Action()
        elif not self._standing:
            self._standing = tick.settled
            self._place = STILL  # the route starts where the robot stands
            action = Action()
        else:
            action = self._do(self.steps[self.index], tick, dt_s)
        self.twist = action.twist
        return action

    def progress(self) -> dict[str, object]:
        """Where the route is: `step` of `steps` (from 1), `description`, `done_share` 0..1,
        `elapsed_s`, `remaining_s` (estimated), `done`, `failure` (empty when there is none),
        `twist` (last asked for)."""
        vx, vy, yaw_rate = self.twist
        total_s = sum(self._expected_s)
        walked_s = sum(self._expected_s[: self.index])
        k = min(self.index, len(self.steps) - 1)
        if self.index < len(self.steps):
            walked_s += self._expected_s[k] * min(self._share, 1.0)
        return {
            "step": k + 1,
            "steps": len(self.steps),
            "description": self.steps[k].describe(),
            "done_share": walked_s / total_s if total_s else float(self.done),
            "elapsed_s": self._elapsed_s,
            "remaining_s": total_s - walked_s,
            "done": self.done,
            "failure": self.failure,
            "twist": {"vx_m_s": vx, "vy_m_s": vy, "yaw_rate_rad_s": yaw_rate},
        }

    def _begin(self) -> None:
        """Forget the step before; its goal is the start of the next."""
        self._start = self._goal
        self._step_s = 0.0
        self._share = 0.0
        self._rate = 0.0
        self._arrived = False
        self._asked = False

    def _next(self) -> None:
        self.index += 1
        self._begin()

    def _reckon(self, tick: Tick, dt_s: float) -> None:
        """Add the walk of one tick: its mean velocity over the time by which the walk went on."""
        if tick.slowdown > 0.0:
            vx, vy, yaw_rate = scaled(tick.velocity, 1.0 / tick.slowdown)
            ox, oy, o_rate = self._pace
            mean = (0.5 * (vx + ox), 0.5 * (vy + oy), 0.5 * (yaw_rate + o_rate))
            self._place = moved(self._place, scaled(mean, tick.slowdown * dt_s))
            self._pace = (vx, vy, yaw_rate)

    def _do(self, step: Step, tick: Tick, dt_s: float) -> Action:
        match step:
            case Move():
                return self._move(step, tick, dt_s)
            case Wait():
                self._share = self._step_s / max(step.duration_s, dt_s)
                if self._share >= 1.0:
                    self._next()
                return Action()
            case Pose():
                self._share = min(self._step_s / max(self._expected_s[self.index], dt_s), 0.99)
                if not self._asked:
                    self._asked = True
                    return Action(posture=step.changes())
                if tick.settled:
                    self._next()
                return Action()
            case Speed():
                self._speed = step.share
                self._next()
                return Action()
            case ChangeGait():
                self._next()
                return Action(gait=step.name)

    def _move(self, step: Move, tick: Tick, dt_s: float) -> Action:
        self._goal = moved(self._start, step.twist)
        if self._arrived:
            if not tick.settled:
                return Action()
            if self._is_near(self._offset(self._goal), 1.5):
                self._next()
                return Action()
            self._arrived = False  # led away while the feet were set down: once more
        ahead = self._offset(moved(self._start, scaled(step.twist, self._share)))
        if self._share == 1.0 and self._is_near(ahead, 1.0) and _is_slow(tick.velocity):
            self._arrived = True
            return Action()
        rate_limit, acceleration = pace(step.twist, self._speed, self._robot)
        braking = math.sqrt(2.0 * acceleration * (1.0 - self._share))
        self._rate = min(self._rate + acceleration * dt_s, rate_limit, braking)
        # The reference keeps to the robot's own time: it slows as the robot is slowed, and
        # waits where the robot does not follow.
        lag = max(math.hypot(ahead[0], ahead[1]) / LAG_M, abs(ahead[2]) / LAG_RAD)
        flow = self._rate * max(0.0, 1.0 - lag)
        self._share += flow * tick.slowdown * dt_s
        if 1.0 - self._share < acceleration * dt_s * dt_s:
            self._share = 1.0
        lead = rotated(scaled(step.twist, flow), ahead[2])
        wanted = (
            lead[0] + FEEDBACK_PER_S * ahead[0],
            lead[1] + FEEDBACK_PER_S * ahead[1],
            lead[2] + FEEDBACK_PER_S * ahead[2],
        )
        return Action(twist=scaled(wanted, min(1.0, self._speed / max(load(wanted, self._robot), 1e-9))))

    def _offset(self, target: Vec3) -> Vec3:
        """How far `target` lies from the robot: x, y in the robot's frame, yaw."""
        x, y, yaw = self._place
        return rotated((target[0] - x, target[1] - y, target[2] - yaw), -yaw)

    def _is_near(self, offset: Vec3, tolerances: float) -> bool:
        near = math.hypot(offset[0], offset[1]) <= tolerances * POSITION_TOLERANCE_M
        return near and abs(offset[2]) <= tolerances * HEADING_TOLERANCE_RAD

    def _fail(self, timeout_s: float, tick: Tick) -> None:
        step = self.steps[self.index]
        why = "" if tick.settled else "; the robot does not come to a stand"
        if isinstance(step, Move) and not self._arrived:
            x, y, yaw = self._offset(self._goal)
            why = f": {1000 * math.hypot(x, y):.0f} mm and {math.degrees(abs(yaw)):.1f} deg are left"
            if tick.slowdown < 1.0:
                why += f", and joints at their speed limit slow the robot to {tick.slowdown:.0%}"
        self.failure = (
            f"step {self.index + 1} of {len(self.steps)} ({step.describe()}) did not end within "
            f"{timeout_s:.0f} s{why}; look at `hobnail watch` while it walks"
        )


def _is_slow(velocity: Vec3) -> bool:
    return math.hypot(velocity[0], velocity[1]) <= STILL_M_S and abs(velocity[2]) <= STILL_RAD_S


def load(twist: Vec3, robot: Robot) -> float:
    """How much of the certified envelope a velocity takes; 1 is its border."""
    envelope = robot.envelope
    return math.hypot(
        twist[0] / envelope.forward_m_s, twist[1] / envelope.sideways_m_s, twist[2] / envelope.turn_rad_s
    )


def pace(twist: Vec3, speed: float, robot: Robot) -> tuple[float, float]:
    """Highest rate (1/s) and acceleration (1/s^2) at which a move's share may grow."""
    envelope = robot.envelope
    length, angle = math.hypot(twist[0], twist[1]), abs(twist[2])
    tiny = 1e-9  # a move of nothing ends at once
    acceleration = ACCELERATION_SHARE * min(
        envelope.acceleration_m_s2 / max(length, tiny), envelope.turn_acceleration_rad_s2 / max(angle, tiny)
    )
    return speed / max(load(twist, robot), tiny), acceleration


def expected_seconds(steps: Sequence[Step], robot: Robot) -> tuple[float, ...]:
    """How long each step should take when nothing slows the robot, s."""
    speed, times = DEFAULT_SPEED, []
    limits = robot.posture_limits
    for step in steps:
        if isinstance(step, Move):
            rate, acceleration = pace(step.twist, speed, robot)
            ramp_s = min(rate / acceleration, math.sqrt(1.0 / acceleration))
            top = acceleration * ramp_s
            times.append(2 * ramp_s + (1.0 - top * ramp_s) / top)
        elif isinstance(step, Wait):
            times.append(step.duration_s)
        elif isinstance(step, Pose):
            times.append(
                max(
                    0.5 * (limits.height_m[1] - limits.height_m[0]) / limits.rate_m_s
                    if step.height_m
                    else 0.0,
                    max(abs(a or 0.0) for a in (step.roll_rad, step.pitch_rad, step.yaw_rad))
                    / limits.rate_rad_s,
                    limits.lean_m / limits.rate_m_s if step.lean_m else 0.0,
                )
            )
        else:
            if isinstance(step, Speed):
                speed = step.share
            times.append(0.0)
    return tuple(times)


def moved(start: Vec3, twist: Vec3) -> Vec3:
    """`start` after the arc that a constant body velocity draws in unit time.  Yaw is not wrapped."""
    return compose(start, exp_twist(*twist, 1.0))


def scaled(twist: Vec3, factor: float) -> Vec3:
    """A twist times a number."""
    return (twist[0] * factor, twist[1] * factor, twist[2] * factor)


def rotated(vector: Vec3, angle_rad: float) -> Vec3:
    """The planar part of a twist or offset turned by an angle; its yaw stays."""
    cos, sin = math.cos(angle_rad), math.sin(angle_rad)
    return (cos * vector[0] - sin * vector[1], sin * vector[0] + cos * vector[1], vector[2])
