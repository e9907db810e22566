"""Advice on horns: by how many teeth, which way, what is left; rad."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.servo import JointMap
from hobnail.workshop.calibrate.seat import advice, better_seat
from robots import juniper

TOOTH = math.tau / 25


@pytest.mark.parametrize(
    ("trim_deg", "direction", "teeth", "left_deg"),
    [
        (15.0, 1, 1, 0.6),  # a tooth of 25 is 14.4 deg (common practice: most splines have 25)
        (-15.0, 1, -1, -0.6),
        (15.0, -1, -1, 0.6),
        (30.0, 1, 2, 1.2),
        (8.0, 1, 1, -6.4),
    ],
)
def test_by_hand(trim_deg: float, direction: int, teeth: int, left_deg: float) -> None:
    seat = better_seat(math.radians(trim_deg), direction)
    assert seat is not None
    assert seat.teeth == teeth
    assert math.degrees(seat.left_rad) == pytest.approx(left_deg)


@pytest.mark.parametrize("trim_deg", [0.0, 7.1, -7.1])
def test_within_half_a_tooth_there_is_no_better_seat(trim_deg: float) -> None:
    assert better_seat(math.radians(trim_deg), 1) is None


def test_another_spline_has_other_teeth() -> None:
    """24 teeth step by 15 deg."""
    seat = better_seat(math.radians(16.0), 1, teeth=24)
    assert seat is not None
    assert seat.teeth == 1
    assert math.degrees(seat.left_rad) == pytest.approx(1.0)


@given(st.floats(-0.785, 0.785), st.sampled_from([1, -1]), st.integers(10, 60), st.floats(-1.0, 1.0))
def test_seated_anew_the_joint_stands_where_its_shaft_has_it(
    trim: float, direction: int, teeth: int, shaft: float
) -> None:
    """By the servo map: at one pulse, the horn turned by the teeth told moves the joint to where the
    trim that is left says."""
    seat = better_seat(trim, direction, teeth)
    if seat is None:
        assert abs(trim) <= 0.5 * math.tau / teeth + 1e-12
        return
    assert abs(seat.left_rad) <= 0.5 * math.tau / teeth + 1e-12
    joint = replace(juniper().joints[1], direction=direction, trim_rad=trim)
    pulse = 1500.0 + shaft * 400.0
    before = JointMap(joint).angle_rad(pulse)
    after = JointMap(replace(joint, trim_rad=seat.left_rad)).angle_rad(pulse)
    assert after - before == pytest.approx(seat.teeth * math.tau / teeth, abs=1e-9)


def test_the_advice_says_how_many_which_way_and_what_is_left() -> None:
    seat = better_seat(math.radians(15.0), 1)
    assert seat is not None
    text = advice(seat, ("bends", "straightens"))
    assert "wrong by 1 tooth of a spline of 25" in text
    assert "by 14.4 deg, bent" in text
    assert "trim left would be +0.6 deg" in text
    assert "supply off" in text
