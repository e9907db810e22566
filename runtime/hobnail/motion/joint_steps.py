"""How far joints may turn in one tick, and how far ahead they are commanded; rad, s.

The allowed steps are leg by leg (roll, hip pitch, knee pitch), all above zero.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from hobnail.motion.foot import Foot
from hobnail.motion.whole_body import WholeBody, hold
from hobnail.robot import Vec3

# Of the allowed joint step: rounding must not carry a joint past it.
STEP_SHARE = 0.9999


def excess_step(before: Sequence[Vec3], after: Sequence[Vec3], steps: Sequence[Vec3]) -> float:
    """Greatest joint step as a multiple of what is allowed; 0 when all are within."""
    worst = 0.0
    for old, new, most in zip(before, after, steps, strict=True):
        (a0, b0, c0), (a1, b1, c1), (a, b, c) = old, new, most
        if not (-a <= a1 - a0 <= a and -b <= b1 - b0 <= b and -c <= c1 - c0 <= c):
            worst = max(worst, *(abs(y - x) / d for x, y, d in zip(old, new, most, strict=True)))
    return worst


def clamp_steps(
    before: Sequence[Vec3], after: Sequence[Vec3], steps: Sequence[Vec3]
) -> tuple[tuple[Vec3, ...], int]:
    """The last resort: each joint held to its step, off the path, and how many were."""
    held = tuple(_near(old, new, most) for old, new, most in zip(before, after, steps, strict=True))
    count = sum(a != b for one, two in zip(held, after, strict=True) for a, b in zip(one, two, strict=True))
    return held, count


# What the ground does through all feet together: force ahead, left and up (N), and the
# turning about the body, as force over arm for a foot that carries everything (N/m).
Drive = tuple[float, float, float, float]


class FeedForward:
    """What the servos are sent, leg by leg: the geometric angles with the corrections of
    `hobnail.motion.load`, as far as each joint's step allows."""

    __slots__ = ("_feet", "commanded_rad")

    def __init__(self, feet: Sequence[Foot], body: WholeBody, drive: Drive) -> None:
        self._feet = feet
        anywhere = [(math.inf, math.inf, math.inf)] * len(feet)
        self.commanded_rad = body.joints_rad
        self.advance(body.joints_rad, body, drive, 1.0, anywhere)

    def advance(
        self,
        before: Sequence[Vec3],
        body: WholeBody,
        drive: Drive,
        time_s: float,
        steps: Sequence[Vec3],
    ) -> None:
        """Go on with the body, which went from `before` in `time_s` along its path while the
        ground did `drive` to it."""
        hz = 1.0 / time_s
        ahead, left, up, spin = drive
        commanded = []
        for foot, (x, y, z), (a0, b0, c0), angles, last, most in zip(
            self._feet, body.feet_m, before, body.joints_rad, self.commanded_rad, steps, strict=True
        ):
            if foot.correction.active:
                a, b, c = angles
                speeds = ((a - a0) * hz, (b - b0) * hz, (c - c0) * hz)
                _, hip_y, hip_z = foot.hip
                load = foot.load
                push = (load * (ahead - spin * y), load * (left + spin * x), load * up)
                angles = hold(
                    foot.correction.command(angles, speeds, y - hip_y, z - hip_z, push), foot.limits
                )
            commanded.append(_near(last, angles, most))
        self.commanded_rad = tuple(commanded)


def _near(old: Vec3, new: Vec3, most: Vec3) -> Vec3:
    """`new`, or the nearest to it within one step of `old`."""
    (a0, b0, c0), (a1, b1, c1), (a, b, c) = old, new, most
    if -a <= a1 - a0 <= a and -b <= b1 - b0 <= b and -c <= c1 - c0 <= c:
        return new
    a, b, c = (min(max(y, x - d), x + d) for x, y, d in zip(old, new, most, strict=True))
    return a, b, c
