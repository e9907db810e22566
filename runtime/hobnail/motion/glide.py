"""Moving a few numbers smoothly to a target that may change on the way; any unit.

`Slew` keeps value and slope continuous (velocities: so accelerations are
continuous), `Glide` value, slope and curvature (positions: so accelerations
are continuous).  Both replan from where they are when the target changes, so
no change of mind can make a step.  Time is an argument; no clock is read.

The polynomials are the cubic and quintic Hermite forms that end at rest; the
quintic from rest is the minimum-jerk profile of Flash & Hogan (1985).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, TypeVar

if TYPE_CHECKING:  # configurations are read without it
    import numpy as np
    from numpy.typing import NDArray

# Time in which a slope at its full rate is taken off when hardly any way is left.
EASE_S = 0.1


Number = TypeVar("Number", float, "NDArray[np.float64]")


def minimum_jerk(u: Number) -> Number:
    """10 u^3 - 15 u^4 + 6 u^5 for u in 0..1, one or an array (Flash & Hogan 1985)."""
    return u * u * u * (10.0 + u * (6.0 * u - 15.0))


Line = tuple[float, float]  # offset from the target, its slope
SlewState = tuple[list[float], list[float], list[float], list[Line], float, list[Line], float, bool]

LEVEL: Line = (0.0, 0.0)


class Slew:
    """Several numbers that move together to a target by cubic pieces.

    A motion is a sum of two, as in `Glide`: the way to the target, which all components
    go in the same time, and what it cannot use of the slope before it, taken off in EASE_S.
    So no slope is carried on for the time of a long new motion, past target and range.

    The lists are replaced, never changed in place, so that `state` is a cheap
    snapshot which `restore` takes back.
    """

    __slots__ = ("_left_s", "_old", "_old_left_s", "_way", "moving", "slope", "target", "value")

    def __init__(self, value: Sequence[float]) -> None:
        self.value = list(value)
        self.target = list(value)
        self.slope = [0.0] * len(self.value)
        self._way: list[Line] = [LEVEL] * len(self.value)
        self._left_s = 0.0
        self._old: list[Line] = list(self._way)
        self._old_left_s = 0.0
        self.moving = False

    @property
    def remaining_s(self) -> float:
        """Time until all is at its target."""
        return max(self._left_s, self._old_left_s) if self.moving else 0.0

    def aim(self, target: Sequence[float], rates: Sequence[float]) -> None:
        """Set a new target; no component's slope will pass its rate (per s)."""
        time = 0.0
        for value, slope, goal, rate in zip(self.value, self.slope, target, rates, strict=True):
            change = goal - value
            # A cubic from rest peaks at 1.5 times its mean slope.  One whose old slope first
            # has to turn round, and then swings back by a third, needs a longer time.
            need = 1.5 * abs(change) / rate
            time = max(time, need * 1.5 if change * slope < 0.0 else need)
        ways, olds = [], []
        for value, slope, goal in zip(self.value, self.slope, target, strict=True):
            gap = value - goal
            # A cubic stays between its ends when it starts towards the end at no more than
            # three times its mean slope.
            keep = slope if 0.0 < -slope * gap * time <= 3.0 * gap * gap else 0.0
            ways.append((gap, keep))
            olds.append((0.0, slope - keep))
        self.target = list(target)
        self._way, self._left_s = ways, time
        self._old, self._old_left_s = olds, EASE_S if any(self.slope) else 0.0
        self.moving = max(time, self._old_left_s) > 0.0

    def jump(self, index: int, value: float) -> None:
        """Set one component at once, when nothing that moves depends on it."""
        self.value = [*self.value[:index], value, *self.value[index + 1 :]]
        self.slope = [*self.slope[:index], 0.0, *self.slope[index + 1 :]]
        self._way = [*self._way[:index], (value - self.target[index], 0.0), *self._way[index + 1 :]]
        self._old = [*self._old[:index], LEVEL, *self._old[index + 1 :]]

    def advance(self, time_s: float) -> None:
        """Move on by `time_s`."""
        self._way = [_level_out(line, time_s, self._left_s) for line in self._way]
        self._old = [_level_out(line, time_s, self._old_left_s) for line in self._old]
        self.moving = time_s < max(self._left_s, self._old_left_s)
        self._left_s -= time_s
        self._old_left_s -= time_s
        self.value = [
            goal + way[0] + old[0] for goal, way, old in zip(self.target, self._way, self._old, strict=True)
        ]
        self.slope = [way[1] + old[1] for way, old in zip(self._way, self._old, strict=True)]

    def state(self) -> SlewState:
        """A snapshot for `restore`."""
        return (
            self.value,
            self.slope,
            self.target,
            self._way,
            self._left_s,
            self._old,
            self._old_left_s,
            self.moving,
        )

    def restore(self, state: SlewState) -> None:
        """Go back to a snapshot."""
        (
            self.value,
            self.slope,
            self.target,
            self._way,
            self._left_s,
            self._old,
            self._old_left_s,
            self.moving,
        ) = state


def _level_out(line: Line, time_s: float, remaining_s: float) -> Line:
    """A line after `time_s` of the cubic that brings it to zero and level in `remaining_s`."""
    if time_s >= remaining_s:
        return LEVEL
    gap, v = line
    s = time_s / remaining_s
    r = 1.0 - s
    return (
        r * r * (gap * (1.0 + 2.0 * s) + v * time_s),
        r * (v * (1.0 - 3.0 * s) - gap * 6.0 * s / remaining_s),
    )


Motion = tuple[float, float, float]  # offset from the target, its slope, its curvature

AT_REST: Motion = (0.0, 0.0, 0.0)


def settle(offset: Motion, time_s: float, remaining_s: float) -> Motion:
    """An offset (value, slope, curvature) after `time_s` of the quintic that brings it to
    rest at zero in `remaining_s`.

    Replanning from the result with the rest of the time follows the same
    quintic, so calling it tick by tick is the whole curve.
    """
    if time_s >= remaining_s:
        return AT_REST
    e, v, a = offset
    s = time_s / remaining_s
    r = 1.0 - s
    r2 = r * r
    v *= remaining_s
    a *= remaining_s * remaining_s
    # Quintic Hermite basis that ends at rest, and its two derivatives.
    value = r2 * r * (e * (1.0 + s * (3.0 + 6.0 * s)) + v * s * (1.0 + 3.0 * s) + 0.5 * a * s * s)
    slope = r2 * (-30.0 * e * s * s + v * (1.0 + s * (2.0 - 15.0 * s)) + 0.5 * a * s * (2.0 - 5.0 * s))
    curve = r * (
        -60.0 * e * s * (1.0 - 2.0 * s) + v * s * (-36.0 + 60.0 * s) + a * (1.0 + s * (-8.0 + 10.0 * s))
    )
    return value, slope / remaining_s, curve / (remaining_s * remaining_s)


GlideState = tuple[list[float], list[float], list[Motion], float, list[Motion], float, bool]


class Glide:
    """Several numbers that move to their targets by quintic pieces, each at its own rate.

    A motion is a sum of two: the way to the target, and what is left of the motion
    before it, taken off within a few EASE_S.  So no old motion is carried on for the time
    of a long new one, however often targets change: slopes stay below 1.6 times
    their rates (found by search), and from rest below the rates themselves.
    """

    __slots__ = ("_left_s", "_old", "_old_left_s", "_way", "moving", "rates", "target", "value")

    def __init__(self, value: Sequence[float], rates: Sequence[float]) -> None:
        self.value = list(value)
        self.target = list(value)
        self.rates = tuple(rates)
        self._way: list[Motion] = [AT_REST] * len(self.value)
        self._left_s = 0.0
        self._old: list[Motion] = list(self._way)
        self._old_left_s = 0.0
        self.moving = False

    def aim(self, target: Sequence[float], within_s: float | None = None) -> None:
        """Set new targets: reached together, at the rates given, or just `within_s`.

        The same targets again, with no time, change nothing.
        """
        goals = list(target)
        if goals == self.target and within_s is None:
            return
        slopes = [way[1] + old[1] for way, old in zip(self._way, self._old, strict=True)]
        gaps = [value - goal for value, goal in zip(self.value, goals, strict=True)]
        # Minimum jerk peaks at 1.875 times its mean slope.
        time = max(1.875 * abs(gap) / rate for gap, rate in zip(gaps, self.rates, strict=True))
        time = within_s if within_s is not None else max(time, 3.0 * EASE_S)
        ease = max(3.0 * abs(slope) / rate for slope, rate in zip(slopes, self.rates, strict=True))
        ways, olds = [], []
        for gap, slope, way, old in zip(gaps, slopes, self._way, self._old, strict=True):
            # The new way takes over a slope that it can use: such a quintic overshoots only
            # when it starts away from its end, or at more than 2.5 times its mean slope.
            keep = slope if 0.0 < -slope * gap * time <= 2.5 * gap * gap else 0.0
            ways.append((gap, keep, 0.0))
            olds.append((0.0, slope - keep, way[2] + old[2]))
        self.target = goals
        self._way, self._left_s = ways, time
        self._old, self._old_left_s = olds, min(max(ease, 1.0) * EASE_S, time)
        self.moving = any(motion != AT_REST for motion in ways + olds)

    def advance(self, time_s: float) -> None:
        """Move on by `time_s`."""
        self._way = [settle(motion, time_s, self._left_s) for motion in self._way]
        self._old = [settle(motion, time_s, self._old_left_s) for motion in self._old]
        self.value = [
            goal + way[0] + old[0] for goal, way, old in zip(self.target, self._way, self._old, strict=True)
        ]
        self.moving = time_s < self._left_s
        self._left_s -= time_s
        self._old_left_s -= time_s

    def state(self) -> GlideState:
        """A snapshot for `restore`."""
        return (
            self.value,
            self.target,
            self._way,
            self._left_s,
            self._old,
            self._old_left_s,
            self.moving,
        )

    def restore(self, state: GlideState) -> None:
        """Go back to a snapshot."""
        (
            self.value,
            self.target,
            self._way,
            self._left_s,
            self._old,
            self._old_left_s,
            self.moving,
        ) = state
