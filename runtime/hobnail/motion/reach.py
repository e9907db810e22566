"""Whether legs reach the feet of a whole cycle from a body that shifts over its supports; m, body frame.

`hobnail.motion.pacing.reach_radius` is the reach about a foot's neutral place; this
is what is left of it for strides once the body sways.  Worked out with arrays when a
gait is planned.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from hobnail.motion.foot import Foot
from hobnail.motion.foot_path import FootPath
from hobnail.motion.pacing import within_limits
from hobnail.motion.sway import PeriodicSway
from hobnail.robot import Gait

INSTANTS = 20  # of the cycle
BEARINGS = np.linspace(0.0, 2.0 * math.pi, 12, endpoint=False)  # of the stride
SWEEPS = np.linspace(0.0, 1.0, 17)  # of the longest, tried
SHARES = (1.0, 0.75, 0.5, 0.25, 0.0)  # of the body's shift, tried
# Of the reach without a shift, what must be left for strides.
LEAST_SHARE = 0.4


def fit_sway(
    feet: Sequence[Foot], gait: Gait, path: FootPath, height_m: float, reach_m: Sequence[float]
) -> tuple[Gait, PeriodicSway, list[float]]:
    """The gait with as much of its body shift as leaves reach for strides, that sway, and the
    reach (m, the greatest excursion from neutral, at most `reach_m`), leg by leg."""
    neutral = [foot.neutral for foot in feet]
    for share in SHARES:
        shifting = replace(gait, body_shift=share * gait.body_shift)
        sway = PeriodicSway(neutral, shifting, height_m)
        left = reach_with_sway(feet, gait, path, sway, reach_m) if sway.active else list(reach_m)
        if all(a >= LEAST_SHARE * b for a, b in zip(left, reach_m, strict=True)):
            break
    return shifting, sway, left


def reach_with_sway(
    feet: Sequence[Foot], gait: Gait, path: FootPath, sway: PeriodicSway, reach_m: Sequence[float]
) -> list[float]:
    """Greatest half sweep (m) of a stance, whatever its bearing, with which each leg reaches its
    foot at every instant of the cycle; 0 where it does not even on the spot.

    Taken at the longest cycle, in which the body follows its supports farthest.
    """
    duty = gait.duty
    rate_hz = 1.0 / (gait.cycle_s or gait.cycle_range_s[1])
    clocks = np.arange(INSTANTS) / INSTANTS
    on_the_spot = np.array([sway.at(float(clock), (0.0, 0.0, 0.0, rate_hz))[:2] for clock in clocks])
    # The same for a stride of 1 m a cycle: along it, as far as the body's velocity drags it.
    dragged = np.array([sway.at(float(clock), (rate_hz, 0.0, 0.0, rate_hz))[0] for clock in clocks])
    dragged -= on_the_spot[:, 0]
    found = []
    for foot, phase, most in zip(feet, gait.phases, reach_m, strict=True):
        since = (clocks - phase) % 1.0
        u = np.clip((since - duty) / (1.0 - duty), 0.0, 1.0)
        shape = np.array([path.at(float(share)) for share in u])
        travel, lift = np.where(since < duty, 0.0, shape.T)
        # Ahead of neutral, for a stride of 1 m a cycle.
        ahead = 0.5 * duty - since + travel - dragged
        stride = SWEEPS * most / (0.5 * duty)
        way = stride[:, None, None] * ahead
        x = foot.from_hip[0] + way * np.cos(BEARINGS)[:, None] - on_the_spot[:, 0]
        y = foot.from_hip[1] + way * np.sin(BEARINGS)[:, None] - on_the_spot[:, 1]
        z = np.broadcast_to(foot.from_hip[2] + gait.lift_m * lift, x.shape)
        ok = within_limits(foot.kinematics, foot.limits, x, y, z).all(axis=(1, 2))
        beyond = np.flatnonzero(~ok)
        found.append(float(SWEEPS[max(int(beyond[0]) - 1, 0)]) * most if len(beyond) else most)
    return found
