"""What all servos are sent for the geometric angles of a tick; rad, N.

The corrections themselves, leg by leg, are in `hobnail.motion.load`.  They have no say in
how fast the robot goes: they follow it as far as each joint's step allows.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import inf

from hobnail.motion.foot import Foot
from hobnail.motion.joint_steps import clamp_limits, clamp_steps
from hobnail.motion.load import Drive, FootDrive
from hobnail.motion.whole_body import WholeBody
from hobnail.robot import Vec3

# Feet nearer together than this (m^2, mean square) have no arm to turn the body with.
LEAST_ARM2 = 1e-6
STILL: Vec3 = (0.0, 0.0, 0.0)

FeedForwardState = tuple[tuple[Vec3, ...], list[Vec3], float]


class FeedForward:
    """`commanded_rad` holds what the servos are sent, leg by leg."""

    __slots__ = ("_body", "_legs", "_speeds", "_tick_s", "commanded_rad")

    def __init__(self, feet: Sequence[Foot], body: WholeBody, drive: Drive) -> None:
        """For a body that stands still."""
        self._body = body
        self._legs = [(foot, foot.correction.command, foot.limits) for foot in feet]
        self._speeds: list[Vec3] = [STILL] * len(feet)  # of the joints, mean of the latest tick, rad/s
        self._tick_s = 1.0  # how long that was
        self.commanded_rad = body.joints_rad
        self.advance(body.joints_rad, drive, 1.0, [(inf, inf, inf)] * len(feet))

    def advance(self, before: Sequence[Vec3], drive: Drive, time_s: float, steps: Sequence[Vec3]) -> None:
        """Go on with the body, whose joints went from `before` in `time_s` along their path
        while the ground did `drive` to it; no joint by more than its step."""
        body = self._body
        drive = self._about_the_carried(drive)
        hz = 1.0 / time_s
        # The mean speed of a tick is half a tick old, in which a swing changes its speed a lot.
        lead = time_s / (time_s + self._tick_s)
        commanded, speeds = [], []
        for (foot, command, limits), foot_m, (a0, b0, c0), angles, (u0, v0, w0), last, most in zip(
            self._legs,
            body.feet_m,
            before,
            body.joints_rad,
            self._speeds,
            self.commanded_rad,
            steps,
            strict=True,
        ):
            a, b, c = angles
            speed = u, v, w = (a - a0) * hz, (b - b0) * hz, (c - c0) * hz
            speeds.append(speed)
            if u or v or w:
                speed = u + lead * (u - u0), v + lead * (v - v0), w + lead * (w - w0)
            sent = a, b, c = command(angles, speed, foot_m, foot.load, drive)
            (low_a, high_a), (low_b, high_b), (low_c, high_c) = limits
            if not (low_a <= a <= high_a and low_b <= b <= high_b and low_c <= c <= high_c):
                sent = a, b, c = clamp_limits(sent, limits)
            a0, b0, c0 = last
            da, db, dc = most
            if not (-da <= a - a0 <= da and -db <= b - b0 <= db and -dc <= c - c0 <= dc):
                sent = clamp_steps(last, sent, most)
            commanded.append(sent)
        self.commanded_rad = tuple(commanded)
        self._speeds, self._tick_s = speeds, time_s

    def state(self) -> FeedForwardState:
        """A snapshot for `restore`."""
        return self.commanded_rad, self._speeds, self._tick_s

    def restore(self, state: FeedForwardState) -> None:
        """Go back to a snapshot."""
        self.commanded_rad, self._speeds, self._tick_s = state

    def _about_the_carried(self, drive: Drive) -> FootDrive:
        """The drive for each foot: the moment as a spin about the point that carries the robot."""
        ahead, left, up, moment = drive
        whole = x_of = y_of = arm2 = 0.0
        for (foot, _, _), (x, y, _) in zip(self._legs, self._body.feet_m, strict=True):
            load = foot.load
            whole += load
            x_of += load * x
            y_of += load * y
            arm2 += load * (x * x + y * y)
        if whole == 0.0:
            return ahead, left, up, 0.0
        x_of, y_of = x_of / whole, y_of / whole
        arm2 = arm2 / whole - x_of * x_of - y_of * y_of
        spin = (moment - x_of * left + y_of * ahead) / arm2 if arm2 > LEAST_ARM2 else 0.0
        return ahead + spin * y_of, left - spin * x_of, up, spin
