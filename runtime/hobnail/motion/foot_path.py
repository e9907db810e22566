"""The shape of a swing: keyframes (time, travel, lift) joined smoothly; shares of 1.

Between keyframes each of travel and lift is a quintic with zero curvature at
the keyframes, so that position, velocity and acceleration are continuous; at
lift-off and touch-down velocity and acceleration are zero, which over the
ground means that no foot scuffs.  The slopes at inner keyframes are capped so that
no quintic leaves the range of the keyframes at its ends: a path drawn above the
ground stays above it.

Nothing here knows where the foot starts or ends; `hobnail.motion.walker` does.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Sequence
from itertools import pairwise

from hobnail.robot import Keyframe

# With both end slopes at most twice the mean slope, a quintic with zero end
# curvatures is monotone: at the middle its slope is 1.875 - 0.4375 (m0 + m1).
SLOPE_CAP = 2.0

Segment = tuple[float, float, tuple[float, ...], tuple[float, ...]]


class FootPath:
    """Travel and lift over the time of a swing, all as shares of 1."""

    __slots__ = ("_segments", "_starts")

    def __init__(self, keyframes: Sequence[Keyframe]) -> None:
        times = [frame.time for frame in keyframes]
        travel = _segments(times, [frame.travel for frame in keyframes])
        lift = _segments(times, [frame.lift for frame in keyframes])
        self._starts = times[1:-1]
        self._segments: list[Segment] = [
            (start, 1.0 / (end - start), along, up)
            for start, end, along, up in zip(times[:-1], times[1:], travel, lift, strict=True)
        ]

    def at(self, u: float) -> tuple[float, float, float, float]:
        """(travel, lift, second derivatives of both by u) at the share `u` (0..1) of the swing."""
        start, per_time, (a0, a1, a3, a4, a5), (b0, b1, b3, b4, b5) = self._segments[
            bisect_right(self._starts, u)
        ]
        s = (u - start) * per_time
        s3 = s * s * s
        return (
            a0 + a1 * s + s3 * (a3 + s * (a4 + s * a5)),
            b0 + b1 * s + s3 * (b3 + s * (b4 + s * b5)),
            per_time * per_time * s * (6.0 * a3 + s * (12.0 * a4 + s * 20.0 * a5)),
            per_time * per_time * s * (6.0 * b3 + s * (12.0 * b4 + s * 20.0 * b5)),
        )


def _segments(times: Sequence[float], values: Sequence[float]) -> list[tuple[float, ...]]:
    """Coefficients (s^0, s^1, s^3, s^4, s^5) of each segment over its own time 0..1."""
    spans = [end - start for start, end in pairwise(times)]
    steps = [end - start for start, end in pairwise(values)]
    inner = [_inner_slope(*before, *after) for before, after in pairwise(zip(steps, spans, strict=True))]
    slopes = [0.0, *inner, 0.0]
    pieces: list[tuple[float, ...]] = []
    for index, (step, span) in enumerate(zip(steps, spans, strict=True)):
        m0, m1 = slopes[index] * span, slopes[index + 1] * span
        pieces.append(
            (
                values[index],
                m0,
                10.0 * step - 6.0 * m0 - 4.0 * m1,
                -15.0 * step + 8.0 * m0 + 7.0 * m1,
                6.0 * step - 3.0 * m0 - 3.0 * m1,
            )
        )
    return pieces


def _inner_slope(step0: float, span0: float, step1: float, span1: float) -> float:
    """Slope at a keyframe from the mean slopes before and after it: the steeper one, as far
    as the cap allows, so that a foot cruises between keyframes and eases beside them;
    none where the path turns back."""
    before, after = step0 / span0, step1 / span1
    if before * after <= 0.0:
        return 0.0
    gentle, steep = sorted((before, after), key=abs)
    return steep if abs(steep) <= SLOPE_CAP * abs(gentle) else SLOPE_CAP * gentle
