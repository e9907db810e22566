"""Support polygons and margins against scipy, brute force and the published margins of crawls; m."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.spatial import ConvexHull, QhullError

from hobnail.motion.schedule import events, feet_down
from hobnail.motion.support import convex_hull, longitudinal_margin, stability_margin, support_centre
from hobnail.robot import Vec2
from robots import examples

places = st.tuples(*[st.integers(-200, 200).map(lambda mm: mm / 1000.0)] * 2)
feet_lists = st.lists(places, min_size=1, max_size=8)


def scipy_hull(points: Sequence[Vec2]) -> ConvexHull:
    """scipy's hull; the example is dropped when it has none."""
    try:
        hull = ConvexHull(np.array(points)) if len(points) > 2 else None
    except QhullError:
        hull = None
    assume(hull is not None)
    return hull


@examples(200)
@given(st.lists(places, min_size=3, max_size=12))
def test_hull_agrees_with_scipy(points: list[Vec2]) -> None:
    """Same corners, as far as they are corners, in counter-clockwise order."""
    judge = scipy_hull(points)
    ours = convex_hull(points)
    corners = {tuple(points[index]) for index in judge.vertices}
    assert set(ours) <= corners | set(points)
    area = 0.5 * sum(x0 * y1 - x1 * y0 for (x0, y0), (x1, y1) in zip(ours, [*ours[1:], ours[0]], strict=True))
    assert area == pytest.approx(judge.volume, abs=1e-12)  # positive: counter-clockwise
    assert set(ours) == corners


@pytest.mark.parametrize(
    ("points", "hull"),
    [
        ([], []),
        ([(1.0, 2.0)], [(1.0, 2.0)]),
        ([(0.0, 0.0), (0.0, 0.0)], [(0.0, 0.0)]),
        ([(0.0, 0.0), (2.0, 0.0), (1.0, 0.0)], [(0.0, 0.0), (2.0, 0.0)]),
        (
            [(0.0, 0.0), (1.0, 0.0), (1.0, 1.0), (0.0, 1.0), (0.5, 0.5)],
            [(0.0, 0.0), (1.0, 0.0), (1.0, 1.0), (0.0, 1.0)],
        ),
    ],
)
def test_hulls_by_hand(points: list[Vec2], hull: list[Vec2]) -> None:
    assert convex_hull(points) == hull


@examples(200)
@given(st.lists(places, min_size=3, max_size=8), places)
def test_margin_inside_agrees_with_the_half_planes_of_scipy(feet: list[Vec2], point: Vec2) -> None:
    judge = scipy_hull(feet)
    inside = -float((judge.equations @ np.array([*point, 1.0])).max())
    margin = stability_margin(feet, point)
    if inside >= 0.0:
        assert margin == pytest.approx(inside, abs=1e-12)
    else:
        assert margin <= 0.0


@examples(200)
@given(feet_lists, places)
def test_margin_outside_agrees_with_brute_force(feet: list[Vec2], point: Vec2) -> None:
    """The distance to the nearest of many points on all lines between two feet, among
    which are the border's."""
    margin = stability_margin(feet, point)
    shares = np.linspace(0.0, 1.0, 401)[:, None]
    nearest = math.inf
    for a, b in itertools.combinations_with_replacement(feet, 2):
        line = np.array(a) + shares * (np.array(b) - np.array(a))
        nearest = min(nearest, float(np.hypot(*(line - np.array(point)).T).min()))
    if margin > 0.0:
        # Inside, lines between feet run nearer than the border or along it.
        assert nearest <= margin + 1e-3
    else:
        assert -margin <= nearest + 1e-12
        assert -margin == pytest.approx(nearest, abs=1e-3)


def test_no_feet_no_margin() -> None:
    assert stability_margin([], (0.0, 0.0)) == -math.inf
    assert longitudinal_margin([], (0.0, 0.0)) == -math.inf


@examples(200)
@given(st.lists(places, min_size=3, max_size=8), places)
def test_longitudinal_margin_agrees_with_brute_force(feet: list[Vec2], point: Vec2) -> None:
    """Walking along x from the point, the half planes of scipy's hull say where one leaves it."""
    judge = scipy_hull(feet)
    low, high = -math.inf, math.inf
    for nx, ny, offset in judge.equations:
        rest = ny * point[1] + offset
        if abs(nx) < 1e-9:
            assume(abs(rest) > 1e-9)
            if rest > 0.0:
                low, high = math.inf, -math.inf
        elif nx > 0.0:
            high = min(high, -rest / nx)
        else:
            low = max(low, -rest / nx)
    assume(abs(high - low) > 1e-9)
    margin = longitudinal_margin(feet, point)
    if low > high:
        assert margin == -math.inf
    else:
        assert margin == pytest.approx(min(high - point[0], point[0] - low), abs=1e-9)


# ---- an ideal straight walk


def least_margin(duty: float, phases: Sequence[float], *, pitch: float, stroke: float) -> float:
    """Least longitudinal margin over a cycle: feet left fore, right fore, left hind, right
    hind, `pitch` apart along a side, sweep `stroke` back while they stand.

    The margin changes linearly between events, so it is least just beside one.
    """
    least = math.inf
    for event in events(duty, phases):
        for clock in (event - 1e-9, event + 1e-9):
            down = feet_down(duty, phases, clock)
            standing = [
                (x + stroke * (0.5 - (clock - phase) % 1.0 / duty), y)
                for (x, y), phase, is_down in zip(
                    ((pitch / 2, 1.0), (pitch / 2, -1.0), (-pitch / 2, 1.0), (-pitch / 2, -1.0)),
                    phases,
                    down,
                    strict=True,
                )
                if is_down
            ]
            least = min(least, longitudinal_margin(standing, (0.0, 0.0)))
    return least


def optimum(duty: float) -> tuple[float, ...]:
    """McGhee & Frank, Math. Biosci. 3:331 (1968) (memory): left fore, right fore, left hind, right hind.

    A front lift-off coincides with the hind touch-down on that side: the limits from
    both sides count.
    """
    return 0.0, 0.5, duty, duty - 0.5


@pytest.mark.parametrize(
    ("duty", "stroke", "margin"),
    # Song & Waldron, Machines That Walk (1989) (memory), four legs (n = 2), P = 1, to 1e-6.
    [(0.85, 1.0, 0.117647), (0.9, 1.0, 0.166667), (11 / 12, 0.5, 0.090909)],
)
def test_margins_of_song_and_waldron(duty: float, stroke: float, margin: float) -> None:
    assert least_margin(duty, optimum(duty), pitch=1.0, stroke=stroke) == pytest.approx(margin, abs=1e-6)


@examples(100)
@given(st.floats(0.75, 0.97), st.floats(0.2, 1.0))
def test_margin_of_mc_ghee_and_frank(duty: float, share: float) -> None:
    """(beta - 3/4) times the stride with optimum phases (1968; memory), within the stroke for
    which Song & Waldron state it."""
    stroke = share * duty / (3.0 * duty - 2.0)
    stride = stroke / duty
    margin = least_margin(duty, optimum(duty), pitch=1.0, stroke=stroke)
    assert margin == pytest.approx((duty - 0.75) * stride, abs=1e-6)


@examples(100)
@given(st.floats(0.76, 0.9), *[st.floats(0.0, 1.0, exclude_max=True)] * 3)
def test_no_other_phases_do_better(duty: float, second: float, third: float, fourth: float) -> None:
    """That is what makes them the optimum (McGhee & Frank 1968; memory)."""
    best = least_margin(duty, optimum(duty), pitch=1.0, stroke=0.5)
    assert least_margin(duty, (0.0, second, third, fourth), pitch=1.0, stroke=0.5) <= best + 1e-6


def test_quarter_phases_have_half_the_margin_in_one_order_only() -> None:
    """At duty .85: .05 of the stride in lateral sequence, less in diagonal sequence
    (reference values, recomputed)."""
    stroke = 1.0
    stride = stroke / 0.85
    lateral = least_margin(0.85, (0.25, 0.75, 0.0, 0.5), pitch=1.0, stroke=stroke)
    diagonal = least_margin(0.85, (0.75, 0.25, 0.0, 0.5), pitch=1.0, stroke=stroke)
    assert lateral == pytest.approx(0.05 * stride, abs=1e-6)
    assert diagonal < lateral - 0.01


def test_lateral_sequence_is_statically_stable_at_three_quarters_and_diagonal_is_not() -> None:
    """Usherwood & Smith, Biology Letters (2018), 10.1098/rsbl.2018.0137: duty .75, D .25 and .75."""
    lateral = least_margin(0.75, (0.25, 0.75, 0.0, 0.5), pitch=1.0, stroke=0.8)
    diagonal = least_margin(0.75, (0.75, 0.25, 0.0, 0.5), pitch=1.0, stroke=0.8)
    assert lateral >= -1e-6
    assert diagonal < -0.01


# ---- where the feet's middle is


def test_support_centre_of_a_trot_is_where_the_diagonals_cross() -> None:
    """By hand: left fore (.2, .1) to right hind (-.1, -.1), and mirrored: at y = 0, x = .05."""
    feet = [(0.2, 0.1), (0.2, -0.1), (-0.1, 0.1), (-0.1, -0.1)]
    assert support_centre(feet, 0.5, (0.5, 0.0, 0.0, 0.5)) == pytest.approx((0.05, 0.0), abs=1e-6)


def test_support_centre_of_a_trot_with_uneven_legs() -> None:
    """Diagonals of a trapezium: fore feet .1 to the side, hind ones .2.  By similar triangles
    they cross at a third of the way from fore to hind."""
    feet = [(0.15, 0.1), (0.15, -0.1), (-0.15, 0.2), (-0.15, -0.2)]
    assert support_centre(feet, 0.5, (0.5, 0.0, 0.0, 0.5)) == pytest.approx((0.05, 0.0), abs=1e-6)


@examples(100)
@given(feet=st.lists(places, min_size=4, max_size=4, unique=True), shift=places)
def test_support_centre_moves_with_the_feet(feet: list[Vec2], shift: Vec2) -> None:
    phases, duty = (0.25, 0.75, 0.0, 0.5), 0.8
    x, y = support_centre(feet, duty, phases)
    moved = [(a + shift[0], b + shift[1]) for a, b in feet]
    assert support_centre(moved, duty, phases) == pytest.approx((x + shift[0], y + shift[1]), abs=1e-9)


def test_support_centre_of_a_crawl_on_a_rectangle_is_its_middle() -> None:
    feet = [(0.1, 0.1), (0.1, -0.1), (-0.1, 0.1), (-0.1, -0.1)]
    assert support_centre(feet, 0.8, (0.25, 0.75, 0.0, 0.5)) == pytest.approx((0.0, 0.0), abs=1e-12)
