"""Joint angle <-> pulse: round trips, signs by hand, tables against numpy.interp, limits; rad and us."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.robot import Joint, Servo
from hobnail.servo import JointMap, angle_rad, pulse_us, reachable_rad
from robots import examples, joints, juniper, make_joint

SERVO = Servo(name="any", speed_rad_s=8.0, torque_nm=1.0, rated_v=6.0)
# 1000 us a radian, 1500 us at the middle.
PLAIN = make_joint(
    "plain",
    SERVO,
    0,
    middle_rad=0.0,
    travel_rad=3.0,
    pulse_map=((-1.0, 500.0), (1.0, 2500.0)),
    pulse_limits_us=(600.0, 2400.0),
)


@pytest.mark.parametrize(
    ("changes", "angle", "pulse"),
    [
        # shaft = direction * (angle - zero) + trim, by hand.
        ({}, 0.0, 1500.0),
        ({}, 0.3, 1800.0),
        ({"direction": -1}, 0.3, 1200.0),
        ({"zero_rad": 0.5}, 0.5, 1500.0),
        ({"zero_rad": 0.5}, 0.3, 1300.0),
        ({"zero_rad": 0.5, "direction": -1}, 0.3, 1700.0),
        # A horn that sits 0.1 rad too far round on the shaft: whatever the direction, the shaft
        # goes 0.1 rad farther.
        ({"trim_rad": 0.1}, 0.0, 1600.0),
        ({"trim_rad": 0.1, "direction": -1}, 0.0, 1600.0),
        ({"trim_rad": 0.1, "direction": -1, "zero_rad": 0.5}, 0.3, 1800.0),
        # A servo whose pulse falls with its shaft angle.
        ({"pulse_map": ((-1.0, 2500.0), (1.0, 500.0))}, 0.3, 1200.0),
        # Straight on past the ends of the map.
        ({}, 1.4, 2900.0),
    ],
)
def test_signs_by_hand(changes: dict[str, object], angle: float, pulse: float) -> None:
    joint = replace(PLAIN, **changes)  # type: ignore[arg-type]
    assert pulse_us(joint, angle) == pytest.approx(pulse, abs=1e-9)
    assert angle_rad(joint, pulse) == pytest.approx(angle, abs=1e-12)


def test_data_sheet_servo_of_juniper() -> None:
    """270 degrees over 2000 us (its data sheet): the middle is 1500 us, 40 degrees of hip zero."""
    hip = juniper().legs[0].joints[1]
    assert pulse_us(hip, math.radians(40.0)) == pytest.approx(1500.0, abs=1e-9)
    assert pulse_us(hip, math.radians(40.0 + 13.5)) == pytest.approx(1600.0, abs=1e-9)


@examples(300)
@given(joints(), st.floats(-3.0, 3.0))
def test_angle_to_pulse_to_angle(joint: Joint, angle: float) -> None:
    assert angle_rad(joint, pulse_us(joint, angle)) == pytest.approx(angle, abs=1e-9)


@examples(300)
@given(joints(), st.floats(300.0, 2700.0))
def test_pulse_to_angle_to_pulse(joint: Joint, pulse: float) -> None:
    assert pulse_us(joint, angle_rad(joint, pulse)) == pytest.approx(pulse, abs=1e-6)


@examples(200)
@given(joints(), st.floats(0.0, 1.0))
def test_table_agrees_with_numpy(joint: Joint, share: float) -> None:
    """Within the table, linear interpolation as numpy does it."""
    shafts = [shaft for shaft, _ in joint.pulse_map]
    pulses = [pulse for _, pulse in joint.pulse_map]
    shaft = shafts[0] + share * (shafts[-1] - shafts[0])
    angle = (shaft - joint.trim_rad) / joint.direction + joint.zero_rad
    assert pulse_us(joint, angle) == pytest.approx(float(np.interp(shaft, shafts, pulses)), abs=1e-7)


@examples(100)
@given(joints(), st.floats(0.01, 1.0), st.booleans())
def test_table_goes_on_straight_past_its_ends(joint: Joint, beyond: float, upper: bool) -> None:
    (s0, p0), (s1, p1) = joint.pulse_map[-2:] if upper else joint.pulse_map[:2]
    slope = (p1 - p0) / (s1 - s0)
    shaft = s1 + beyond if upper else s0 - beyond
    pulse = p1 + slope * beyond if upper else p0 - slope * beyond
    angle = (shaft - joint.trim_rad) / joint.direction + joint.zero_rad
    assert pulse_us(joint, angle) == pytest.approx(pulse, abs=1e-6)
    assert angle_rad(joint, pulse) == pytest.approx(angle, abs=1e-9)


@examples(300)
@given(joints(), st.floats(0.0, 1.0))
def test_reachable_angles_keep_both_limits(joint: Joint, share: float) -> None:
    low, high = reachable_rad(joint)
    assert joint.angle_limits_rad[0] <= low
    assert high <= joint.angle_limits_rad[1]
    pulse = pulse_us(joint, low + share * (high - low))
    if low <= high:
        assert joint.pulse_limits_us[0] - 1e-6 <= pulse <= joint.pulse_limits_us[1] + 1e-6


@examples(200)
@given(joints(), st.floats(0.001, 1.0))
def test_reachable_angles_are_all_there_are(joint: Joint, beyond: float) -> None:
    """Just past either end one of the two limits is broken."""
    low, high = reachable_rad(joint)
    for angle in (low - beyond, high + beyond):
        pulse = pulse_us(joint, angle)
        within_angles = joint.angle_limits_rad[0] <= angle <= joint.angle_limits_rad[1]
        within_pulses = joint.pulse_limits_us[0] <= pulse <= joint.pulse_limits_us[1]
        assert not (within_angles and within_pulses)


def test_reachable_by_hand() -> None:
    """600 to 2400 us at 1000 us a radian: 0.9 rad either way; a trim of 0.1 shifts both ends."""
    assert reachable_rad(PLAIN) == pytest.approx((-0.9, 0.9))
    assert reachable_rad(replace(PLAIN, trim_rad=0.1)) == pytest.approx((-1.0, 0.8))
    assert reachable_rad(replace(PLAIN, angle_limits_rad=(-0.2, 0.3))) == (-0.2, 0.3)


def test_a_map_made_once_gives_what_the_functions_give() -> None:
    joint_map = JointMap(PLAIN)
    assert joint_map.pulse_us(0.25) == pulse_us(PLAIN, 0.25)
    assert joint_map.angle_rad(1700.0) == angle_rad(PLAIN, 1700.0)
    assert joint_map.pulse_limits_us == (600.0, 2400.0)
