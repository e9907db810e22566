"""The body's shift over its changing supports; m along the body's x and y, s.

Slow gaits move the body over the support before a foot lifts, quick ones
hardly at all; both follow from the same inverted pendulum.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence

from hobnail.motion.balance import GRAVITY_M_S2
from hobnail.motion.glide import AT_REST, Motion, settle
from hobnail.motion.support import support_centroids
from hobnail.robot import Gait, Vec2

HARMONICS = 4
NONE: Vec2 = (0.0, 0.0)
# Step by which the speed of the planned shift is taken.
INSTANT_S = 1e-4


class PeriodicSway:
    """The shift that belongs to a gait, periodic in the gait clock.

    The wanted zero-moment point is the centroid of the standing feet.  Its
    Fourier series, term by term divided by 1 + (z/g) w^2, is the one periodic
    motion of the linear inverted pendulum (Kajita et al. 2001) with that
    zero-moment point.
    """

    __slots__ = ("_height_term", "_terms", "active")

    def __init__(self, feet: Sequence[Vec2], gait: Gait, height_m: float) -> None:
        self._terms: list[tuple[complex, complex]] = []
        pieces = support_centroids(feet, gait.duty, gait.phases)
        for k in range(1, HARMONICS + 1):
            turn = -2j * math.pi * k
            weight_x = weight_y = 0j
            for start, length, (x, y) in pieces:
                wave = (cmath.exp(turn * (start + length)) - cmath.exp(turn * start)) / turn
                weight_x += x * wave
                weight_y += y * wave
            self._terms.append((2.0 * gait.body_shift * weight_x, 2.0 * gait.body_shift * weight_y))
        self._height_term = height_m / GRAVITY_M_S2 * (2.0 * math.pi) ** 2
        self.active = any(abs(x) + abs(y) > 1e-4 for x, y in self._terms)

    def at(self, clock: float, rate_hz: float) -> Vec2:
        """Shift (m) at a time of the cycle, at a cycle rate."""
        turn = cmath.exp(2j * math.pi * clock)
        stiff = self._height_term * rate_hz * rate_hz
        wave = 1.0 + 0j
        x = y = 0.0
        for k, (term_x, term_y) in enumerate(self._terms, 1):
            wave *= turn
            share = wave / (1.0 + stiff * k * k)
            x += (term_x * share).real
            y += (term_y * share).real
        return x, y


SwayState = tuple[Vec2, Vec2, tuple[Motion, Motion], float]


class BodyShift:
    """The shift that the body has: that of its plan, eased over when the plan changes.

    `plan` None is standing: no shift.
    """

    __slots__ = ("_ease", "_left_s", "_speed", "plan", "value")

    def __init__(self) -> None:
        self.plan: PeriodicSway | None = None
        self.value = NONE
        self._speed = NONE
        self._ease: tuple[Motion, Motion] = (AT_REST, AT_REST)
        self._left_s = 0.0

    @property
    def moving(self) -> bool:
        """Whether time changes the shift."""
        return self.plan is not None or self._left_s > 0.0

    def change(self, plan: PeriodicSway | None, clock: float, rate_hz: float, within_s: float) -> None:
        """Ease over from the shift and speed there are to those of another plan."""
        self.plan = plan if plan is not None and plan.active else None
        now = self._planned(clock, rate_hz)
        soon = self._planned(clock + rate_hz * INSTANT_S, rate_hz)
        (x, y), (vx, vy) = self.value, self._speed
        self._ease = (
            (x - now[0], vx - (soon[0] - now[0]) / INSTANT_S, 0.0),
            (y - now[1], vy - (soon[1] - now[1]) / INSTANT_S, 0.0),
        )
        self._left_s = within_s if self._ease != (AT_REST, AT_REST) else 0.0

    def advance(self, time_s: float, clock: float, rate_hz: float) -> None:
        """Move on by `time_s`, at the end of which the gait clock is at `clock`."""
        x, y = self._planned(clock, rate_hz)
        left = self._left_s
        if left > 0.0:
            ease_x, ease_y = self._ease
            self._ease = (settle(ease_x, time_s, left), settle(ease_y, time_s, left))
            self._left_s = max(left - time_s, 0.0)
            x += self._ease[0][0]
            y += self._ease[1][0]
        if time_s > 0.0:
            self._speed = ((x - self.value[0]) / time_s, (y - self.value[1]) / time_s)
        self.value = (x, y)

    def _planned(self, clock: float, rate_hz: float) -> Vec2:
        return self.plan.at(clock, rate_hz) if self.plan else NONE

    def state(self) -> SwayState:
        """A snapshot for `restore`; the plan is not part of it."""
        return self.value, self._speed, self._ease, self._left_s

    def restore(self, state: SwayState) -> None:
        """Go back to a snapshot."""
        self.value, self._speed, self._ease, self._left_s = state
