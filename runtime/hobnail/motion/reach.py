"""Whether legs reach the feet of a whole cycle from a body that shifts over its supports; m, body frame.

`hobnail.motion.pacing.reach_radius` is the disc that a leg reaches about its foot's
neutral place.  Here is how far a cycle leads each foot from there: the stride and the
shift together, both of which are linear in the twist.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from hobnail.motion.foot_path import FootPath
from hobnail.motion.planar import Twist, point_speed
from hobnail.motion.sway import Inertia, PeriodicSway
from hobnail.robot import Gait, Vec2

Array = NDArray[np.float64]

INSTANTS = 24  # of the cycle
CYCLES_KEPT = 64
# Of the disc, what the shift on the spot may take: the rest is for strides.
SHIFT_SHARE = 0.6
# Of the disc, what may be planned with: instants lie between those that are looked at.
PLANNED_SHARE = 0.95


def fit_shift(gait: Gait, feet: Sequence[Vec2], height_m: float, discs_m: Sequence[float]) -> Gait:
    """The gait with as much of its body shift as leaves reach for strides.

    Taken at the longest cycle, in which the body follows its supports farthest.
    """
    clocks = np.arange(INSTANTS) / INSTANTS
    rate_hz = 1.0 / (gait.cycle_s or gait.cycle_range_s[1])
    x, y = PeriodicSway(feet, gait, Inertia(1.0, height_m)).over_cycle(clocks, rate_hz)[0]
    farthest = float(np.hypot(x, y).max())
    most = SHIFT_SHARE * min(discs_m)
    return gait if farthest <= most else replace(gait, body_shift=gait.body_shift * most / farthest)


class CycleReach:
    """How far a cycle leads the feet, and the twists with which every leg reaches all of it."""

    __slots__ = ("_ahead", "_clocks", "_discs2", "_feet", "_neutral", "_shifts", "_sway")

    def __init__(
        self,
        gait: Gait,
        path: FootPath,
        sway: PeriodicSway,
        feet: Sequence[Vec2],
        discs_m: Sequence[float],
    ) -> None:
        self._sway = sway
        self._clocks = np.arange(INSTANTS) / INSTANTS
        self._neutral = np.array(feet)
        discs = PLANNED_SHARE * np.array(discs_m)
        self._discs2 = (discs * discs)[:, None]
        # Ahead of neutral along the way to go, for each m of stride, leg by leg.
        since = (self._clocks - np.array(gait.phases)[:, None]) % 1.0
        in_air = np.clip((since - gait.duty) / (1.0 - gait.duty), 0.0, 1.0)
        travel = [[path.at(float(u))[0] if u > 0.0 else 0.0 for u in leg] for leg in in_air]
        self._ahead = 0.5 * gait.duty - since + np.array(travel)
        farthest = np.abs(self._ahead).max(axis=1)
        self._feet = [
            (x, y, far, disc)
            for (x, y), far, disc in zip(feet, farthest.tolist(), discs.tolist(), strict=True)
        ]
        self._shifts: dict[float, tuple[Array, list[float]]] = {}  # by time of the cycle

    def fit(self, twist: Twist, cycle_s: float) -> Twist:
        """A twist scaled as a whole so that every foot stays in its leg's disc for a cycle."""
        vx, vy, yaw_rate = twist
        (on_the_spot, *added), (most, *most_added) = self._shifts_of(cycle_s)
        shifted = most + sum(abs(v) * by for v, by in zip(twist, most_added, strict=True))
        if all(
            shifted + point_speed(twist, x, y) * cycle_s * farthest <= disc
            for x, y, farthest, disc in self._feet
        ):
            return twist  # as a rule
        x, y = on_the_spot
        moved_x, moved_y = sum(v * by for v, by in zip(twist, added, strict=True))
        stride_x = cycle_s * (vx - yaw_rate * self._neutral[:, 1:])
        stride_y = cycle_s * (vy + yaw_rate * self._neutral[:, :1])
        by_x = stride_x * self._ahead - moved_x
        by_y = stride_y * self._ahead - moved_y
        # The share s of the twist at which |s by - shift| meets the disc.
        size2 = by_x * by_x + by_y * by_y
        along = by_x * x + by_y * y
        spare = np.maximum(self._discs2 - x * x - y * y, 0.0)
        with np.errstate(invalid="ignore", divide="ignore"):
            shares = (along + np.sqrt(along * along + size2 * spare)) / size2
        share = min(1.0, float(np.nanmin(shares, initial=1.0)))
        return twist if share == 1.0 else (vx * share, vy * share, yaw_rate * share)

    def _shifts_of(self, cycle_s: float) -> tuple[Array, list[float]]:
        """The shift over a cycle (see `PeriodicSway.over_cycle`) and the farthest of each of its
        four; cycles of whole ticks are few."""
        kept = self._shifts.get(cycle_s)
        if kept is None:
            if len(self._shifts) == CYCLES_KEPT:
                self._shifts.clear()
            shifts = self._sway.over_cycle(self._clocks, 1.0 / cycle_s)
            most = np.hypot(shifts[:, 0], shifts[:, 1]).max(axis=1).tolist()
            kept = self._shifts[cycle_s] = shifts, most
        return kept
