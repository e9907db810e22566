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
from hobnail.service.route_steps import Move, Pose, Speed, Step, Wait, misfits

if TYPE_CHECKING:
    from hobnail.controller import Tick

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

    Each step's goal hangs on the goal of the step before it, not on where the
    robot came to stand, so errors do not add up.  Along a step a reference
    runs ahead with the envelope's acceleration; the robot gets the
    reference's velocity and a share of its distance from it.  A step that does not end
    in time ends the route: `failure` then says which step and why.
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
        self._robot = robot
        self._expected_s = expected_seconds(self.steps, robot)
        self._elapsed_s = 0.0
        self._pose: Vec3 | None = None  # odometry, yaw unwrapped
        self._goal: Vec3 = (0.0, 0.0, 0.0)  # of the last step begun: where the next one starts
        self._speed = DEFAULT_SPEED
        self._begin()

    @property
    def done(self) -> bool:
        """Nothing more will be asked for: the route is walked, or failed."""
        return bool(self.failure) or self.index > len(self.steps)

    def update(self, tick: Tick, dt_s: float) -> Action:
        """The action for the next tick; standing still once done."""
        if self.done:
            return Action()
        if self._pose is None:
            self._pose = self._goal = self._start = tick.pose
        x, y, yaw = tick.pose
        turned = math.remainder(yaw - self._pose[2], math.tau)
        self._pose = (x, y, self._pose[2] + turned)
        self._elapsed_s += dt_s
        self._step_s += dt_s
        if self.index == len(self.steps):
            return self._settle(tick)
        step = self.steps[self.index]
        if isinstance(step, Move):
            return self._move(step, tick, dt_s)
        if isinstance(step, Wait):
            return self._wait(step, tick, dt_s)
        if isinstance(step, Pose):
            return self._take_posture(step, tick)
        if isinstance(step, Speed):
            self._speed = step.share
            self._next()
            return Action()
        self._next()
        return Action(gait=step.name)

    def progress(self) -> dict[str, object]:
        """Where the route is: `step` of `steps` (from 1), `description`, `done_share` 0..1,
        `elapsed_s`, `remaining_s` (estimated), `done`, `failure` (empty when there is none)."""
        total_s = sum(self._expected_s)
        walked_s = sum(self._expected_s[: self.index])
        k = min(self.index, len(self.steps) - 1)
        if self.index < len(self.steps):
            walked_s += self._expected_s[k] * self._share
            text = self.steps[k].describe()
        else:
            text = "route walked" if self.done else "coming to a stand"
        return {
            "step": k + 1,
            "steps": len(self.steps),
            "description": text,
            "done_share": min(1.0, walked_s / total_s) if total_s else 1.0,
            "elapsed_s": self._elapsed_s,
            "remaining_s": max(0.0, total_s - walked_s),
            "done": self.done,
            "failure": self.failure,
        }

    def _begin(self) -> None:
        """Forget the step before; the goal reached becomes the start of the next."""
        self._start = self._goal
        self._step_s = 0.0
        self._share = 0.0
        self._rate = 0.0
        self._asked = False

    def _next(self) -> None:
        self.index += 1
        self._begin()

    def _move(self, step: Move, tick: Tick, dt_s: float) -> Action:
        rate_limit, acceleration = pace(step.twist, self._speed, self._robot)
        self._goal = moved(self._start, step.twist)
        reference = moved(self._start, scaled(step.twist, self._share))
        ahead = self._offset(reference)
        lag = max(math.hypot(ahead[0], ahead[1]) / LAG_M, abs(ahead[2]) / LAG_RAD)
        if self._share >= 1.0 and self._arrived(ahead, tick.velocity):
            self._next()
            return Action()
        timeout_s = TIMEOUT_S + TIMEOUT_FACTOR * self._expected_s[self.index]
        if self._step_s > timeout_s:
            return self._fail(
                timeout_s,
                f"still {1000 * math.hypot(*self._offset(self._goal)[:2]):.0f} mm and "
                f"{math.degrees(abs(self._offset(self._goal)[2])):.1f} deg from its end",
            )
        # The reference keeps to the robot's own time: it slows as the robot is slowed, and
        # waits when the robot does not follow.
        left = 1.0 - self._share
        braking = math.sqrt(2.0 * acceleration * left)
        self._rate = min(self._rate + acceleration * dt_s, rate_limit, braking)
        flow = self._rate * max(0.0, 1.0 - lag)
        self._share = min(1.0, self._share + flow * tick.slowdown * dt_s)
        if 1.0 - self._share < acceleration * dt_s * dt_s:
            self._share = 1.0
        forward = rotated(scaled(step.twist, flow), ahead[2])
        wanted = (
            forward[0] + FEEDBACK_PER_S * ahead[0],
            forward[1] + FEEDBACK_PER_S * ahead[1],
            forward[2] + FEEDBACK_PER_S * ahead[2],
        )
        return Action(twist=scaled(wanted, min(1.0, self._speed / max(load(wanted, self._robot), 1e-9))))

    def _wait(self, step: Wait, tick: Tick, dt_s: float) -> Action:
        if not self._asked:
            # Standing comes first; only then the waiting is counted.
            if tick.settled and self._step_s > dt_s:
                self._asked = True
                self._step_s = 0.0
            elif self._step_s > TIMEOUT_S:
                return self._fail(TIMEOUT_S, "the feet do not come to a stand")
            return Action()
        self._share = min(1.0, self._step_s / step.duration_s) if step.duration_s else 1.0
        if self._step_s >= step.duration_s - 0.5 * dt_s:
            self._next()
        return Action()

    def _take_posture(self, step: Pose, tick: Tick) -> Action:
        if not self._asked:
            self._asked = True
            self._ticks_since = 0
            return Action(posture=step.changes())
        # The tick that comes with this call may still be the one from before the request.
        self._ticks_since += 1
        timeout_s = TIMEOUT_S + TIMEOUT_FACTOR * self._expected_s[self.index]
        self._share = min(0.99, self._step_s / max(self._expected_s[self.index], 1e-3))
        if tick.settled and self._ticks_since > 1:
            self._next()
        elif self._step_s > timeout_s:
            return self._fail(timeout_s, "the posture is not reached")
        return Action()

    def _settle(self, tick: Tick) -> Action:
        """After the last step: all feet down, and still where the route ends."""
        if tick.settled:
            x, y, yaw = self._offset(self._goal)
            if math.hypot(x, y) > 2 * POSITION_TOLERANCE_M or abs(yaw) > 2 * HEADING_TOLERANCE_RAD:
                self.failure = (
                    f"the robot stands {1000 * math.hypot(x, y):.1f} mm and {math.degrees(abs(yaw)):.2f} deg "
                    "from the end of the route: it moved after its last step; check the log"
                )
            else:
                self._next()
        elif self._step_s > TIMEOUT_S:
            return self._fail(TIMEOUT_S, "the feet do not come to a stand")
        return Action()

    def _fail(self, timeout_s: float, why: str) -> Action:
        k = min(self.index, len(self.steps) - 1)
        self.failure = (
            f"step {k + 1} of {len(self.steps)} ({self.steps[k].describe()}) did not end within "
            f"{timeout_s:.0f} s: {why}; look at `hobnail state` for what slows the robot"
        )
        return Action()

    def _offset(self, target: Vec3) -> Vec3:
        """How far `target` lies from the robot: x, y in the robot's frame, yaw."""
        assert self._pose is not None
        x, y, yaw = self._pose
        return rotated((target[0] - x, target[1] - y, target[2] - yaw), -yaw)

    def _arrived(self, ahead: Vec3, velocity: Vec3) -> bool:
        return (
            math.hypot(ahead[0], ahead[1]) <= POSITION_TOLERANCE_M
            and abs(ahead[2]) <= HEADING_TOLERANCE_RAD
            and math.hypot(velocity[0], velocity[1]) <= STILL_M_S
            and abs(velocity[2]) <= STILL_RAD_S
        )


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
