"""How far a slow gait may stride before it balances only in motion; m, rad, body frame.

A gait is steady while the zero-moment point that its sway asks for stays inside
the polygon of the standing feet by a margin (McGhee & Frank 1968; memory).  Long
strides lead the feet away from under the body and use that margin up.  A stride
is what the body does in one cycle: (x, y, turn) in m, m, rad.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from hobnail.motion.schedule import leg_phase
from hobnail.motion.support import stability_margin
from hobnail.motion.sway import Inertia, PeriodicSway
from hobnail.robot import Gait, Vec2, Vec3

CLOCKS = (np.arange(40) + 0.5) / 40  # of the cycle, at which the margin is taken
HALVINGS = 6  # of the longest stride, to find where the margin ends
MARGIN_M = 0.015
# Of a gait's margin on the spot, where that is small already, this much must be left.
MARGIN_SHARE = 0.65


def least_margin(feet: Sequence[Vec2], gait: Gait, centre: Vec2, stride: Vec3) -> float:
    """Least margin (m) over a cycle of the zero-moment point that the sway asks for, for
    neutral `feet` and a body whose mass is over `centre`; negative outside the feet."""
    sx, sy, turn = stride
    on_the_spot, by_ahead, by_left, by_turn = _zero_moment_ways(tuple(feet), gait)
    point = on_the_spot + sx * by_ahead + sy * by_left + turn * by_turn
    point += np.array(centre)[:, None]
    least = math.inf
    for clock, (x0, y0) in zip(CLOCKS.tolist(), point.T.tolist(), strict=True):
        standing = []
        for (x, y), phase in zip(feet, gait.phases, strict=True):
            since = leg_phase(clock, phase)
            if since < gait.duty:
                ahead = 0.5 * gait.duty - since
                standing.append((x + ahead * (sx - turn * y), y + ahead * (sy + turn * x)))
        least = min(least, stability_margin(standing, (x0, y0)))
    return least


@lru_cache(maxsize=8)
def _zero_moment_ways(feet: tuple[Vec2, ...], gait: Gait) -> NDArray[np.float64]:
    """As `PeriodicSway.over_cycle`, in m of stride and rad of turn in a cycle: without height the
    shift is the zero-moment point itself."""
    return PeriodicSway(feet, gait, Inertia(1.0, 0.0)).over_cycle(CLOCKS, 1.0)


def steady_strides(feet: Sequence[Vec2], gait: Gait, centre: Vec2, longest: Vec3) -> Vec3 | None:
    """Longest strides ahead, sideways and turning, each alone and either way, that keep the
    margin; at most `longest`.  None for a gait that balances only in motion anyhow."""
    on_the_spot = least_margin(feet, gait, centre, (0.0, 0.0, 0.0))
    if on_the_spot <= 0.0:
        return None
    enough = min(MARGIN_M, MARGIN_SHARE * on_the_spot)
    strides = []
    for axis, most in enumerate(longest):
        low, high = 0.0, most
        if _both_ways(feet, gait, centre, axis, high) >= enough:
            low = high
        for _ in range(HALVINGS if low < high else 0):
            middle = 0.5 * (low + high)
            if _both_ways(feet, gait, centre, axis, middle) >= enough:
                low = middle
            else:
                high = middle
        strides.append(max(low, most / 2.0**HALVINGS))
    return strides[0], strides[1], strides[2]


def _both_ways(feet: Sequence[Vec2], gait: Gait, centre: Vec2, axis: int, size: float) -> float:
    margins = []
    for signed in (size, -size):
        stride = [0.0, 0.0, 0.0]
        stride[axis] = signed
        margins.append(least_margin(feet, gait, centre, (stride[0], stride[1], stride[2])))
    return min(margins)
