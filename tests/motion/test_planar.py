"""Motion in the plane against scipy's matrix exponential and published twists; m and rad."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.linalg import expm

from hobnail.motion.planar import Pose, compose, exp_twist, point_speed, to_origin
from robots import examples

speeds = st.floats(-1.0, 1.0)
times = st.floats(0.0, 3.0)
poses = st.tuples(speeds, speeds, st.floats(-4.0, 4.0))


def matrix(pose: Pose) -> NDArray[np.float64]:
    """The pose as a homogeneous matrix."""
    x, y, yaw = pose
    c, s = math.cos(yaw), math.sin(yaw)
    return np.array([[c, -s, x], [s, c, y], [0.0, 0.0, 1.0]])


@pytest.mark.parametrize(
    ("twist", "pose"),
    [
        # Lynch & Park, Modern Robotics, the library's MatrixExp6 example, planar: yaw rate
        # pi/2, v = (3pi/4, 3pi/4) -> a quarter turn and (0, 3).
        ((3 * math.pi / 4, 3 * math.pi / 4, math.pi / 2), (0.0, 3.0, math.pi / 2)),
        # Recomputed by hand: a quarter circle of radius 2/pi.
        ((1.0, 0.0, math.pi / 2), (2 / math.pi, 2 / math.pi, math.pi / 2)),
        # Recomputed with the exponential of the reference page, to its digits.
        ((0.1, 0.03, 0.2), (0.096344652, 0.039767111, 0.2)),
    ],
)
def test_published_twists(twist: Pose, pose: Pose) -> None:
    assert exp_twist(*twist, 1.0) == pytest.approx(pose, rel=1e-8, abs=1e-12)


@examples(100)
@given(speeds, speeds, st.floats(-3.0, 3.0), times)
def test_exponential_agrees_with_scipy(vx: float, vy: float, yaw_rate: float, time_s: float) -> None:
    generator = np.array([[0.0, -yaw_rate, vx], [yaw_rate, 0.0, vy], [0.0, 0.0, 0.0]])
    assert matrix(exp_twist(vx, vy, yaw_rate, time_s)) == pytest.approx(expm(generator * time_s), abs=1e-12)


@pytest.mark.parametrize("yaw_rate", [0.0, 1e-300, 1e-18, 1e-12, 1e-9, 1e-7, 1e-5])
def test_straight_line_is_the_limit(yaw_rate: float) -> None:
    """No digits are lost on the way to a straight line: compared with the series to second order."""
    x, y, yaw = exp_twist(0.2, 0.1, yaw_rate, 2.0)
    angle = 2.0 * yaw_rate
    assert x == pytest.approx(0.4 - 0.2 * angle / 2 - 0.4 * angle**2 / 6, rel=1e-15)
    assert y == pytest.approx(0.2 + 0.4 * angle / 2 - 0.2 * angle**2 / 6, rel=1e-15)
    assert yaw == angle


@examples(200)
@given(poses, poses)
def test_compose_agrees_with_matrices(a: Pose, b: Pose) -> None:
    assert matrix(compose(a, b)) == pytest.approx(matrix(a) @ matrix(b), abs=1e-12)


@examples(100)
@given(speeds, speeds, speeds, times, times)
def test_held_on_is_composed(vx: float, vy: float, yaw_rate: float, first: float, then: float) -> None:
    """A twist held for two times in turn is the twist held for their sum."""
    parts = compose(exp_twist(vx, vy, yaw_rate, first), exp_twist(vx, vy, yaw_rate, then))
    assert parts == pytest.approx(exp_twist(vx, vy, yaw_rate, first + then), abs=1e-12)


@examples(100)
@given(speeds, speeds, speeds, speeds, speeds)
def test_pivot_moves_as_commanded(vx: float, vy: float, yaw_rate: float, px: float, py: float) -> None:
    """Followed over a short time, the pivot goes with (vx, vy): by finite differences."""
    time_s = 1e-6
    moved = compose(exp_twist(*to_origin(vx, vy, yaw_rate, (px, py)), time_s), (px, py, 0.0))
    assert (moved[0] - px) / time_s == pytest.approx(vx, abs=1e-5)
    assert (moved[1] - py) / time_s == pytest.approx(vy, abs=1e-5)


def test_pivot_stays_where_it_is_in_a_turn_about_it() -> None:
    pivot = (0.3, -1.7)
    pose = exp_twist(*to_origin(0.0, 0.0, 0.8, pivot), 2.5)
    assert compose(pose, (*pivot, 0.0))[:2] == pytest.approx(pivot, abs=1e-12)


def test_point_speed_by_hand() -> None:
    """Turning at 2 rad/s, a point 0.3 m out moves at 0.6 m/s; walking adds to it."""
    assert point_speed((0.0, 0.0, 2.0), 0.3, 0.0) == pytest.approx(0.6)
    assert point_speed((0.0, 0.0, 2.0), 0.0, -0.3) == pytest.approx(0.6)
    assert point_speed((0.4, 0.0, 2.0), 0.0, -0.3) == pytest.approx(1.0)
