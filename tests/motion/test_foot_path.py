"""The swing's shape against minimum jerk, finite differences and scipy; shares of 1."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.interpolate import BPoly

from hobnail.motion.foot_path import SLOPE_CAP, FootPath
from hobnail.robot import BUILT_IN_SWING, Keyframe
from robots import examples, swings


@st.composite
def keyframes(draw: st.DrawFn, *, monotone: bool = False) -> tuple[Keyframe, ...]:
    """Two to seven keyframes with values anywhere, or rising all the way."""
    count = draw(st.integers(2, 7))
    gaps = [draw(st.floats(0.05, 1.0)) for _ in range(count - 1)]
    times = [*[0.0, *itertools.accumulate(gap / sum(gaps) for gap in gaps)][:-1], 1.0]
    rows = [[0.0] + [draw(st.floats(-1.0, 2.0)) for _ in range(count - 1)] for _ in range(2)]
    if monotone:
        rows = [sorted(abs(value) for value in row) for row in rows]
    return tuple(
        Keyframe(time=time, travel=travel, lift=lift) for time, travel, lift in zip(times, *rows, strict=True)
    )


def sampled(path: FootPath, times: Sequence[float] | NDArray[np.float64]) -> NDArray[np.float64]:
    """Travel and lift at times: two rows."""
    return np.array([path.at(float(time))[:2] for time in times]).T


def derivatives(path: FootPath, at: float, step: float) -> NDArray[np.float64]:
    """Slope and curvature of travel and lift just beside `at`, on the side of `step`: from
    one polynomial piece, exactly (a quintic through six points of it)."""
    offsets = np.linspace(0.1, 1.0, 6) * step
    values = sampled(path, at + offsets)
    found = []
    for row in values:
        fit = np.polynomial.Polynomial.fit(offsets, row, 5).convert()
        found.append([fit.deriv(order)(0.0) for order in range(3)])
    return np.array(found)


STRAIGHT = FootPath((Keyframe(time=0.0, travel=0.0, lift=0.0), Keyframe(time=1.0, travel=1.0, lift=0.0)))


def test_minimum_jerk_at_a_quarter() -> None:
    """Flash & Hogan 1985: 10 u^3 - 15 u^4 + 6 u^5 at u = .25 is .103515625, exactly.

    Between two keyframes at rest that profile is the whole path: travel from end to
    end, and lift up to a middle keyframe and down again.
    """
    up_and_down = FootPath(
        (
            Keyframe(time=0.0, travel=0.0, lift=0.0),
            Keyframe(time=0.5, travel=0.5, lift=1.0),
            Keyframe(time=1.0, travel=1.0, lift=0.0),
        )
    )
    assert STRAIGHT.at(0.25) == (0.103515625, 0.0, 5.625, 0.0)  # 60 u - 180 u^2 + 120 u^3
    assert up_and_down.at(0.125)[1] == 0.103515625
    assert up_and_down.at(0.875)[1] == pytest.approx(0.103515625, abs=1e-15)


def test_minimum_jerk_peaks() -> None:
    """Flash & Hogan 1985: peak speed 1.875 d/T, peak acceleration (10 / sqrt 3) d/T^2."""
    travel = sampled(STRAIGHT, np.linspace(0.0, 1.0, 20001))[0]
    speed = np.gradient(travel, 1.0 / 20000)
    assert speed.max() == pytest.approx(1.875, rel=1e-7)
    assert np.gradient(speed, 1.0 / 20000).max() == pytest.approx(10.0 / 3.0**0.5, rel=1e-4)


@examples(100)
@given(frames=keyframes() | swings(), share=st.floats(0.05, 0.95))
def test_bends_are_the_second_derivatives(frames: tuple[Keyframe, ...], share: float) -> None:
    """By finite differences, inside each stretch between keyframes."""
    path = FootPath(frames)
    for before, after in pairwise(frames):
        span = after.time - before.time
        at = before.time + (0.02 + 0.96 * share) * span
        step = 0.01 * span
        low, middle, high = (path.at(at + offset) for offset in (-step, 0.0, step))
        # Of 1 over such a span; a quintic's fourth derivative is what a difference is off by.
        for value, bend in ((0, 2), (1, 3)):
            by_difference = (low[value] - 2.0 * middle[value] + high[value]) / 1e-4
            assert middle[bend] * span**2 == pytest.approx(by_difference, abs=0.02)


@examples(100)
@given(keyframes() | swings())
def test_passes_through_its_keyframes(frames: tuple[Keyframe, ...]) -> None:
    path = FootPath(frames)
    for frame in frames:
        assert path.at(frame.time)[:2] == pytest.approx((frame.travel, frame.lift), abs=1e-12)


@examples(100)
@given(keyframes() | swings())
def test_position_velocity_and_acceleration_are_continuous(frames: tuple[Keyframe, ...]) -> None:
    """At every inner keyframe, what comes from the left equals what goes on to the right."""
    path = FootPath(frames)
    for before, here, after in zip(frames, frames[1:], frames[2:], strict=False):
        left = derivatives(path, here.time, -(here.time - before.time))
        right = derivatives(path, here.time, after.time - here.time)
        assert left == pytest.approx(right, rel=1e-6, abs=1e-6)


@examples(100)
@given(keyframes() | swings())
def test_lift_off_and_touch_down_are_at_rest(frames: tuple[Keyframe, ...]) -> None:
    path = FootPath(frames)
    start = derivatives(path, 0.0, frames[1].time)
    end = derivatives(path, 1.0, frames[-2].time - 1.0)
    for ends in (start, end):
        assert ends[:, 1:] == pytest.approx(0.0, abs=1e-6)


@examples(200)
@given(keyframes())
def test_never_leaves_the_range_of_its_neighbours(frames: tuple[Keyframe, ...]) -> None:
    """So that a path drawn above the ground stays above it, however it goes up and down."""
    path = FootPath(frames)
    for before, after in itertools.pairwise(frames):
        rows = sampled(path, np.linspace(before.time, after.time, 60))
        for row, (a, b) in zip(rows, ((before.travel, after.travel), (before.lift, after.lift)), strict=True):
            assert row.min() >= min(a, b) - 1e-12
            assert row.max() <= max(a, b) + 1e-12


@examples(100)
@given(keyframes(monotone=True))
def test_goes_forward_only_where_its_keyframes_do(frames: tuple[Keyframe, ...]) -> None:
    rows = sampled(FootPath(frames), np.linspace(0.0, 1.0, 300))
    assert np.diff(rows).min() >= -1e-12


@examples(100)
@given(keyframes() | swings())
def test_is_the_quintic_that_scipy_makes_of_the_same_ends(frames: tuple[Keyframe, ...]) -> None:
    """Each piece agrees with scipy's Hermite interpolation of values, slopes and no curvature."""
    path = FootPath(frames)
    for before, after in itertools.pairwise(frames):
        span = after.time - before.time
        start = derivatives(path, before.time, span)
        end = derivatives(path, after.time, -span)
        times = np.linspace(before.time, after.time, 20)
        rows = sampled(path, times)
        for row in range(2):
            judge = BPoly.from_derivatives(
                [before.time, after.time], [[*start[row, :2], 0.0], [*end[row, :2], 0.0]]
            )
            assert rows[row] == pytest.approx(judge(times), abs=1e-6)


def test_slope_cap_is_the_greatest_that_keeps_quintics_monotone() -> None:
    """Over all end slopes up to the cap the quintic rises all the way; a little beyond, some do not.

    By scipy's derivative of the quintic with those end slopes and no end curvature.
    """

    def steepest_fall(cap: float) -> float:
        s = np.linspace(0.0, 1.0, 401)
        worst = np.inf
        for m0, m1 in itertools.product(np.linspace(0.0, cap, 21), repeat=2):
            quintic = BPoly.from_derivatives([0.0, 1.0], [[0.0, m0, 0.0], [1.0, m1, 0.0]])
            worst = min(worst, float(quintic.derivative()(s).min()))
        return worst

    assert steepest_fall(SLOPE_CAP) >= -1e-12
    assert steepest_fall(1.1 * SLOPE_CAP) < 0.0


def test_built_in_swing_ends_its_travel_before_it_lands() -> None:
    """Common practice: the foot comes down on the spot, and leaves the ground before it goes far."""
    path = FootPath(BUILT_IN_SWING)
    times = np.linspace(0.0, 1.0, 201)
    travel, lift = sampled(path, times)
    assert lift.max() == 1.0
    assert lift[1:-1].min() > 0.0
    assert travel[times >= 0.9] == pytest.approx(1.0)
    assert np.diff(travel).min() >= -1e-12
