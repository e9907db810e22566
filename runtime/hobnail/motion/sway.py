"""The body's shift over its changing supports; m along the body's x and y, s.

Slow gaits move the body over the support before a foot lifts, quick ones
hardly at all; both follow from the same inverted pendulum.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from hobnail.motion.balance import GRAVITY_M_S2
from hobnail.motion.glide import AT_REST, Motion, settle
from hobnail.motion.schedule import intervals, leg_phase
from hobnail.robot import Gait, Vec2

HARMONICS = 4
NONE: Vec2 = (0.0, 0.0)
# Step by which the speed of the planned shift is taken.
INSTANT_S = 1e-4
# A shift of less than this needs no time before the first foot lifts.
LEAD_M = 0.002
# Coefficients below this are rounding (m, or m per m/s).
NOTHING = 1e-9


Shift = tuple[float, float, float, float]
Wave = tuple[int, complex, complex, float]  # harmonic, its part that turns forth and back, its curvature


class PeriodicSway:
    """The shift that belongs to a gait, periodic in the gait clock, for any velocity.

    The wanted zero-moment point is the centroid of the standing feet, which the
    gait moves about and the body's velocity drags along.  Its Fourier series,
    term by term divided by 1 + (z/g) w^2, is the one periodic motion of the
    linear inverted pendulum (Kajita et al. 2001) with that zero-moment point.
    """

    __slots__ = ("_height_term", "_pace", "_terms", "_waves", "active", "leads")

    def __init__(self, feet: Sequence[Vec2], gait: Gait, height_m: float) -> None:
        share, duty = gait.body_shift, gait.duty
        base_x, base_y, sweep, turn_x, turn_y = ([0j] * (HARMONICS + 1) for _ in range(5))
        for start, length, down in intervals(duty, gait.phases):
            standing = [
                (foot, 0.5 * duty - leg_phase(start + 1e-9, phase))
                for foot, phase, is_down in zip(feet, gait.phases, down, strict=True)
                if is_down
            ]
            mean = share / max(len(standing), 1)
            for k in range(HARMONICS + 1):
                # Integrals over the piece: of 1, and of the time since its start.
                still, going = _integrals(k, start, length)
                for (x, y), ahead in standing:
                    swept = mean * (ahead * still - going)
                    base_x[k] += mean * x * still
                    base_y[k] += mean * y * still
                    sweep[k] += swept
                    turn_x[k] -= y * swept
                    turn_y[k] += x * swept
        # The neutral stance has the mean of the centroids under the body already.
        base_x[0] = base_y[0] = 0j
        # A gait of two alternating sets of feet has every second harmonic only.
        self._terms = [
            term
            for term in zip(range(HARMONICS + 1), base_x, base_y, sweep, turn_x, turn_y, strict=True)
            if any(abs(part) > NOTHING for part in term[1:])
        ]
        self._height_term = height_m / GRAVITY_M_S2 * (2.0 * math.pi) ** 2
        self._pace: Sequence[float] = ()  # that the waves are for; never changed in place
        self._waves: list[Wave] = []
        self.active = bool(self._terms)
        # Whether the body must be over its support before the first foot lifts.
        self.leads = any(abs(x) + abs(y) > LEAD_M for x, y in zip(base_x, base_y, strict=True))

    def at(self, clock: float, pace: Sequence[float]) -> Shift:
        """Shift (m) and its acceleration (m/s^2), (x, y, ax, ay), at a time of the cycle for
        a pace (vx, vy, yaw rate, cycle rate): a new object for every new pace."""
        if pace is not self._pace:
            self._pace, self._waves = pace, self._waves_at(*pace)
        angle = 2.0 * math.pi * clock
        shift = acceleration = 0j  # y as the imaginary part
        for k, forth, back, bend in self._waves:
            turned = cmath.rect(1.0, k * angle)
            part = forth * turned + back * turned.conjugate()
            shift += part
            acceleration -= bend * part
        return shift.real, shift.imag, acceleration.real, acceleration.imag

    def _waves_at(self, vx: float, vy: float, yaw_rate: float, rate_hz: float) -> list[Wave]:
        """The harmonics of the shift at a pace."""
        cycle_s = 1.0 / rate_hz
        bend = (2.0 * math.pi * rate_hz) ** 2
        stiff = self._height_term * rate_hz * rate_hz
        waves = []
        for k, base_x, base_y, sweep, turn_x, turn_y in self._terms:
            # Both signs of each harmonic but the mean.
            share = (1.0 if k else 0.5) / (1.0 + stiff * k * k)
            x = share * (base_x + cycle_s * (vx * sweep + yaw_rate * turn_x))
            y = share * (base_y + cycle_s * (vy * sweep + yaw_rate * turn_y))
            # Twice the real part of each, x + y i as one number.
            waves.append((k, x + 1j * y, x.conjugate() + 1j * y.conjugate(), bend * k * k))
        return waves

    def over_cycle(self, clocks: NDArray[np.float64], rate_hz: float) -> NDArray[np.float64]:
        """The shift (m) at many times of the cycle, shape (5, times), which is linear in the
        velocity: on the spot along x and y, then what is added for each m/s along the way
        to go, then for each rad/s along x and y."""
        if not self._terms:
            return np.zeros((5, len(clocks)))
        turns = np.array([term[0] for term in self._terms])
        weights = np.where(turns, 2.0, 1.0) / (1.0 + self._height_term * (rate_hz * turns) ** 2)
        waves = weights[:, None] * np.exp(2j * math.pi * np.outer(turns, clocks))
        cycle_s = 1.0 / rate_hz
        scale = np.array([1.0, 1.0, cycle_s, cycle_s, cycle_s])
        shifts: NDArray[np.float64] = (
            (scale[:, None] * np.array([term[1:] for term in self._terms]).T) @ waves
        ).real
        return shifts


def _integrals(k: int, start: float, length: float) -> tuple[complex, complex]:
    """Integrals of exp(-2 pi i k t) and of (t - start) exp(-2 pi i k t) over a piece."""
    if k == 0:
        return complex(length), complex(0.5 * length * length)
    turn = 2j * math.pi * k
    first, last = cmath.exp(-turn * start), cmath.exp(-turn * (start + length))
    still = (first - last) / turn
    return still, (still - length * last) / turn


Ease = tuple[Motion, Motion]
SwayState = tuple[Vec2, Vec2, Vec2, Ease, float, Ease, float]


class BodyShift:
    """The shift that the body has: that of its plan, eased over when the plan changes.

    `plan` None is standing: no shift.  `value` is the shift (m), `acceleration` its
    second derivative (m/s^2), along the body's x and y.  The way to the new plan takes the
    time given; the old speed is taken off in the time of the old plan, so that the body
    cannot run far in a gait that is slower than the one before.
    """

    __slots__ = (
        "_ease",
        "_left_s",
        "_old",
        "_old_left_s",
        "_speed",
        "_within_s",
        "acceleration",
        "plan",
        "value",
    )

    def __init__(self) -> None:
        self.plan: PeriodicSway | None = None
        self.value = NONE
        self.acceleration = NONE
        self._speed = NONE
        self._ease: Ease = (AT_REST, AT_REST)
        self._left_s = 0.0
        self._old: Ease = (AT_REST, AT_REST)
        self._old_left_s = 0.0
        self._within_s = math.inf

    @property
    def moving(self) -> bool:
        """Whether time changes the shift."""
        return self.plan is not None or self._left_s > 0.0

    def change(self, plan: PeriodicSway | None, clock: float, pace: Sequence[float], within_s: float) -> None:
        """Ease over from the shift and speed there are to those of another plan."""
        self.plan = plan if plan is not None and plan.active else None
        now = self._planned(clock, pace)
        soon = self._planned(clock + pace[3] * INSTANT_S, pace)
        (x, y), (vx, vy) = self.value, self._speed
        self._ease = ((x - now[0], 0.0, 0.0), (y - now[1], 0.0, 0.0))
        self._old = (
            (0.0, vx - (soon[0] - now[0]) / INSTANT_S, 0.0),
            (0.0, vy - (soon[1] - now[1]) / INSTANT_S, 0.0),
        )
        self._left_s = within_s if self._ease + self._old != (AT_REST,) * 4 else 0.0
        self._old_left_s = min(self._left_s, self._within_s)
        self._within_s = within_s

    def advance(self, time_s: float, clock: float, pace: Sequence[float]) -> None:
        """Move on by `time_s`, at the end of which the gait clock is at `clock`."""
        x, y, ax, ay = self._planned(clock, pace)
        left = self._left_s
        if left > 0.0:
            self._ease = _settled(self._ease, time_s, left)
            self._old = _settled(self._old, time_s, self._old_left_s)
            self._left_s = max(left - time_s, 0.0)
            self._old_left_s -= time_s
            for (off_x, _, bend_x), (off_y, _, bend_y) in (self._ease, self._old):
                x, y, ax, ay = x + off_x, y + off_y, ax + bend_x, ay + bend_y
        if time_s > 0.0:
            self._speed = ((x - self.value[0]) / time_s, (y - self.value[1]) / time_s)
        self.value = (x, y)
        self.acceleration = (ax, ay)

    def _planned(self, clock: float, pace: Sequence[float]) -> Shift:
        return self.plan.at(clock, pace) if self.plan else (0.0, 0.0, 0.0, 0.0)

    def state(self) -> SwayState:
        """A snapshot for `restore`; the plan is not part of it."""
        return (
            self.value,
            self.acceleration,
            self._speed,
            self._ease,
            self._left_s,
            self._old,
            self._old_left_s,
        )

    def restore(self, state: SwayState) -> None:
        """Go back to a snapshot."""
        (
            self.value,
            self.acceleration,
            self._speed,
            self._ease,
            self._left_s,
            self._old,
            self._old_left_s,
        ) = state


def _settled(ease: Ease, time_s: float, left_s: float) -> Ease:
    return settle(ease[0], time_s, left_s), settle(ease[1], time_s, left_s)
