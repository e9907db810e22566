"""What all servos are sent for the geometric angles of a tick; rad, N.

The corrections themselves, leg by leg, are in `hobnail.motion.load`.  They have no say in
how fast the robot goes: they follow it as far as each joint's step allows.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import repeat
from operator import mul, sub

from hobnail.motion.foot import Foot
from hobnail.motion.joint_vector import clamp_steps, held, legwise, within
from hobnail.motion.whole_body import WholeBody

# What the ground does through all feet together: force ahead, left and up (N), and the
# turning about the body, as force over arm for a foot that carries everything (N/m).
Drive = tuple[float, float, float, float]


class FeedForward:
    """`angles` holds what the servos are sent, all joints in a row."""

    __slots__ = ("_active", "_body", "_legs", "angles")

    def __init__(self, feet: Sequence[Foot], body: WholeBody, drive: Drive) -> None:
        """For a body that stands still."""
        self._body = body
        self._legs = [(foot, foot.correction.command, foot.hip[1], foot.hip[2]) for foot in feet]
        self._active = any(foot.correction.active for foot in feet)
        self.angles = self._wanted(body.angles, drive, 1.0)

    def advance(self, before: Sequence[float], drive: Drive, time_s: float, steps: Sequence[float]) -> None:
        """Go on with the body, whose joints went from `before` in `time_s` along their path
        while the ground did `drive` to it; no joint by more than its step."""
        self.angles = clamp_steps(self.angles, self._wanted(before, drive, time_s), steps)

    def _wanted(self, before: Sequence[float], drive: Drive, time_s: float) -> list[float]:
        body = self._body
        if not self._active:
            return body.angles
        ahead, left, up, spin = drive
        speeds = list(map(mul, map(sub, body.angles, before), repeat(1.0 / time_s)))
        wanted: list[float] = []
        for (foot, command, hip_y, hip_z), (x, y, z), angles, turning in zip(
            self._legs, body.feet_m, body.joints_rad, legwise(speeds), strict=True
        ):
            load = foot.load
            force = (load * (ahead - spin * y), load * (left + spin * x), load * up)
            wanted += command(angles, turning, y - hip_y, z - hip_z, force)
        return wanted if within(body.lows, wanted, body.highs) else held(body.lows, wanted, body.highs)
