"""How far joints may turn in one tick; rad, leg by leg (roll, hip pitch, knee pitch).

The allowed steps are all above zero.  No time and no leg is known here.
"""

from __future__ import annotations

from collections.abc import Sequence

from hobnail.robot import Span, Vec3

# Of the allowed joint step: rounding must not carry a joint past it.
STEP_SHARE = 0.9999


def excess_step(before: Sequence[Vec3], after: Sequence[Vec3], steps: Sequence[Vec3]) -> float:
    """Greatest joint step as a multiple of what is allowed; 0 when all are within."""
    worst = 0.0
    for (a0, b0, c0), (a1, b1, c1), (a, b, c) in zip(before, after, steps, strict=True):
        if not (-a <= a1 - a0 <= a and -b <= b1 - b0 <= b and -c <= c1 - c0 <= c):
            worst = max(worst, abs(a1 - a0) / a, abs(b1 - b0) / b, abs(c1 - c0) / c)
    return worst


def clamp_steps(before: Vec3, after: Vec3, steps: Vec3) -> Vec3:
    """The angles of one leg, each held to one step from before."""
    a, b, c = (min(max(y, x - d), x + d) for x, y, d in zip(before, after, steps, strict=True))
    return a, b, c


def clamp_limits(angles: Vec3, limits: Sequence[Span]) -> Vec3:
    """The angles of one leg, each held to its limits."""
    a, b, c = (min(max(angle, low), high) for angle, (low, high) in zip(angles, limits, strict=True))
    return a, b, c
