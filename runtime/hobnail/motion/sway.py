"""The body's shift over its changing supports; m along the body's x and y, s.

Slow gaits move the body over the support before a foot lifts, quick ones
hardly at all; both follow from the same inverted pendulum.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hobnail.motion.balance import GRAVITY_M_S2
from hobnail.motion.foot_path import FootPath
from hobnail.motion.glide import AT_REST, Motion, minimum_jerk, settle
from hobnail.motion.schedule import load_ramp
from hobnail.motion.swung import SwungLeg
from hobnail.robot import Gait, Vec2

HARMONICS = 6
SAMPLES = 240  # of a cycle, from which the series are taken
NONE: Vec2 = (0.0, 0.0)
# Step by which the speed of the planned shift is taken.
INSTANT_S = 1e-4
# A shift of less than this needs no time before the first foot lifts.
LEAD_M = 0.002
# Coefficients below this are rounding (m, or m for each m of stride).
NOTHING = 1e-9

Array = NDArray[np.float64]
Series = NDArray[np.complex128]
Shift = tuple[float, float, float, float]
Wave = tuple[int, complex, complex, float]  # harmonic, its part that turns forth and back, its curvature


class Inertia(NamedTuple):
    """A robot's mass, the height of its centre over the ground, and its legs, foot by foot;
    without legs they are taken to be light."""

    mass_kg: float
    height_m: float
    legs: Sequence[SwungLeg] = ()


class PeriodicSway:
    """The shift that belongs to a gait, periodic in the gait clock, for any velocity.

    The wanted zero-moment point is the centroid of the feet, each as much as it carries,
    which the gait moves about and the body's velocity drags along.  The legs move
    that point too, by their weight and by their inertia, and what they do is taken
    off.  The Fourier series of the rest, term by term divided by 1 + (z/g) w^2, is the
    one periodic motion of the linear inverted pendulum (Kajita et al. 2001) with
    that zero-moment point; what moves with the feet does not count as its mass.
    `body_share` is what is left of the mass, along x and along y.
    """

    __slots__ = ("_high", "_pace", "_terms", "_waves", "active", "body_share", "leads")

    def __init__(self, feet: Sequence[Vec2], gait: Gait, inertia: Inertia) -> None:
        clocks = np.arange(SAMPLES) / SAMPLES
        since = (clocks - np.array(gait.phases)[:, None]) % 1.0
        wanted = _series(_centroid(feet, since, gait.duty))
        # The neutral stance has the mean of the centroids under the body already.
        wanted[:2, 0] = 0.0
        # Whether the body must be over its support before the first foot lifts.
        self.leads = bool(gait.body_shift * np.abs(wanted[:2]).sum(axis=0).max() > LEAD_M)
        hasty = np.zeros_like(wanted)  # what grows with the square of the rate, for 1 Hz
        share, high = np.ones(2), np.full(2, inertia.height_m)
        if inertia.legs:
            ways = _foot_ways(since, gait)
            for leg, (x, y), way in zip(inertia.legs, feet, ways, strict=True):
                moved = np.array(leg.momentum_kg[:2]) / inertia.mass_kg
                # Inertia that turns the robot about y moves the point along x, about x along y.
                about_x, about_y, _ = np.array(leg.angular_kg_m) / inertia.mass_kg
                tipped = np.stack((about_y, -about_x))
                wanted -= _follow(moved, way, x, y)
                hasty += _follow(tipped, way, x, y)
                share -= np.diagonal(moved)
                high -= np.diagonal(tipped)
        turns = np.arange(HARMONICS + 1)
        hasty *= -((2.0 * math.pi * turns) ** 2) / GRAVITY_M_S2
        # A gait of two alternating sets of feet has every second harmonic only.
        self._terms = [
            (int(k), (gait.body_shift * wanted[:, k]).tolist(), (gait.body_shift * hasty[:, k]).tolist())
            for k in turns
            if gait.body_shift * max(np.abs(wanted[:, k]).max(), np.abs(hasty[:, k]).max()) > NOTHING
        ]
        self.body_share: Vec2 = (float(share[0]), float(share[1]))
        high *= (2.0 * math.pi) ** 2 / GRAVITY_M_S2
        self._high: Vec2 = (float(high[0]), float(high[1]))
        self._pace: Sequence[float] = ()  # that the waves are for; never changed in place
        self._waves: list[Wave] = []
        self.active = bool(self._terms)

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
        ahead, left, turn = vx / rate_hz, vy / rate_hz, yaw_rate / rate_hz
        rate2 = rate_hz * rate_hz
        bend = (2.0 * math.pi) ** 2 * rate2
        (share_x, share_y), (high_x, high_y) = self.body_share, self._high
        waves = []
        for k, wanted, hasty in self._terms:
            x0, y0, x_ahead, y_ahead, x_left, y_left, x_turn, y_turn = (
                slow + rate2 * fast for slow, fast in zip(wanted, hasty, strict=True)
            )
            k2 = rate2 * k * k
            half = 1.0 if k else 0.5  # of both signs of each harmonic but the mean
            x = half * (x0 + ahead * x_ahead + left * x_left + turn * x_turn) / (share_x + high_x * k2)
            y = half * (y0 + ahead * y_ahead + left * y_left + turn * y_turn) / (share_y + high_y * k2)
            # Twice the real part of each, x + y i as one number.
            waves.append((k, x + 1j * y, x.conjugate() + 1j * y.conjugate(), bend * k * k))
        return waves

    def over_cycle(self, clocks: Array, rate_hz: float) -> Array:
        """The shift (m) at many times of the cycle, which is linear in the velocity: on the
        spot, and what is added for each m/s ahead, each m/s to the left and each rad/s;
        shape (4, 2, times)."""
        shifts = np.zeros((4, 2, len(clocks)))
        for row, (vx, vy, yaw_rate) in zip(shifts, [(0.0, 0.0, 0.0), *np.eye(3).tolist()], strict=True):
            for k, forth, back, _ in self._waves_at(vx, vy, yaw_rate, rate_hz):
                turned = np.exp(2j * math.pi * k * clocks)
                both = forth * turned + back * turned.conjugate()
                row += both.real, both.imag
        shifts[1:] -= shifts[0]
        return shifts


# Rows of what follows: x and y on the spot, then for each m of stride ahead, each m to the
# left, and each rad of turn in a cycle.


def _centroid(feet: Sequence[Vec2], since: Array, duty: float) -> Array:
    """Centroid of the feet over a cycle, each as much as it carries, about the body's pose;
    `since` is the share of the cycle since touch-down, foot by foot."""
    loads = carried(since, duty)
    loads /= np.maximum(loads.sum(axis=0), NOTHING)
    x, y = (np.array(feet).T[:, :, None] * loads).sum(axis=1)
    swept = loads * (0.5 * duty - since)
    by_x, by_y = np.array(feet).T @ swept
    both, none = swept.sum(axis=0), np.zeros_like(x)
    return np.stack((x, y, both, none, none, both, -by_y, by_x))


def carried(since: Array, duty: float) -> Array:
    """How much feet carry, 0 to 1, at shares of the cycle since their touch-down: taken up and
    given off along minimum-jerk ramps; of the same shape."""
    u = np.clip(np.minimum(since, duty - since) / load_ramp(duty), 0.0, 1.0)
    return minimum_jerk(u)


def _foot_ways(since: Array, gait: Gait) -> Series:
    """How each foot goes relative to the body over a cycle, along the way to go for each m of
    stride, and up; shape (feet, 2, harmonics)."""
    path = FootPath(gait.swing)
    in_air = np.clip((since - gait.duty) / (1.0 - gait.duty), 0.0, 1.0)
    flown = np.zeros((*in_air.shape, 2))
    flown[in_air > 0.0] = [path.at(u)[:2] for u in in_air[in_air > 0.0].tolist()]
    along = 0.5 * gait.duty - since + flown[..., 0]
    return _series(np.stack((along, gait.lift_m * flown[..., 1]), axis=1))


def _follow(matrix: Array, way: Series, x: float, y: float) -> Series:
    """What two rows of a leg's matrix (see `SwungLeg`) make of the ways of a foot at (x, y)."""
    along, up = way
    ahead, left, lift = matrix.T[:, :, None]
    return np.concatenate((lift * up, ahead * along, left * along, (x * left - y * ahead) * along))


def _series(samples: Array) -> Series:
    """Fourier coefficients of samples over a cycle (the last axis), from the mean on."""
    series: Series = np.fft.rfft(samples)[..., : HARMONICS + 1] / samples.shape[-1]
    return series


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
