"""The angles of all joints as one flat sequence, leg by leg (roll, hip pitch, knee pitch); rad.

Every tick compares all of them with limits and with how far they may turn, so these
go over the whole sequence at once.  No time and no leg is known here.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from operator import le, sub, truediv

from hobnail.robot import Vec3

# Of the allowed joint step: rounding must not carry a joint past it.
STEP_SHARE = 0.9999


def legwise(angles: Sequence[float]) -> tuple[Vec3, ...]:
    """The same, three by three."""
    return tuple(zip(angles[0::3], angles[1::3], angles[2::3], strict=True))


def within(low: Iterable[float], values: Sequence[float], high: Iterable[float]) -> bool:
    """Whether each value is within its range."""
    return all(map(le, low, values)) and all(map(le, values, high))


def held(low: Iterable[float], values: Iterable[float], high: Iterable[float]) -> list[float]:
    """Each value brought into its range."""
    return [min(max(value, a), b) for a, value, b in zip(low, values, high, strict=True)]


def excess_step(before: Sequence[float], after: Sequence[float], steps: Sequence[float]) -> float:
    """Greatest joint step as a multiple of what is allowed (above zero); 0 when all are within."""
    turned = list(map(abs, map(sub, after, before)))
    return 0.0 if all(map(le, turned, steps)) else max(map(truediv, turned, steps))


def clamp_steps(before: Sequence[float], after: list[float], steps: Sequence[float]) -> list[float]:
    """Each angle, or the nearest to it within one step from before."""
    if all(map(le, map(abs, map(sub, after, before)), steps)):
        return after
    return [min(max(b, a - step), a + step) for a, b, step in zip(before, after, steps, strict=True)]
