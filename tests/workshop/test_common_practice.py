"""What practitioners say of walking robots, tried on juniper in physics; each prints its effect size.

Source of every claim here: common practice.  The robot and the size of what is
changed are ours; only the direction of each effect is asserted, with the least
size at which it would be called one.
"""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import pytest

from hobnail import load_robot
from hobnail.robot import Robot
from hobnail.workshop.rehearse import rehearse, walking
from workshop.bare_trot import trot

CONFIG = Path(__file__).parents[2] / "config"


@pytest.fixture(scope="module")
def juniper() -> Robot:
    return load_robot(CONFIG / "juniper.yaml")


def with_cycle(robot: Robot, cycle_s: float) -> Robot:
    first, *others = robot.gaits
    return replace(robot, gaits=(replace(first, cycle_s=cycle_s), *others))


def told(claim: str, *effects: str) -> None:
    print(f"common practice: {claim}: {', '.join(effects)}")


def test_interpolated_keyframes_shake_the_chassis_less_than_bare_ones(juniper: Robot) -> None:
    bare = trot(juniper, vx=0.1, interpolated=False).jolt_m_s2
    smooth = trot(juniper, vx=0.1, interpolated=True).jolt_m_s2
    told("interpolated keyframes", f"chassis acceleration {bare:.2f} -> {smooth:.2f} m/s2")
    assert smooth < 0.9 * bare


def test_arcs_about_the_pivot_turn_truer_and_slip_less_than_straight_lines(juniper: Robot) -> None:
    rate = 0.9
    results = {}
    for arcs in (False, True):
        outcome = trot(juniper, yaw_rate=rate, cycle_s=1.0, arcs=arcs)
        results[arcs] = (abs(outcome.twist[2] - rate) / rate, outcome.slip_m)
    (straight_error, straight_slip), (arc_error, arc_slip) = results[False], results[True]
    told(
        "feet on arcs",
        f"turn rate off by {straight_error:.1%} -> {arc_error:.1%}",
        f"slip {1000 * straight_slip:.0f} -> {1000 * arc_slip:.0f} mm a foot in 4 s",
    )
    assert arc_slip < straight_slip
    assert arc_error < straight_error


def test_quick_small_steps_tilt_less(juniper: Robot) -> None:
    tilts = {
        cycle_s: math.degrees(rehearse(slow, walking(slow, 0.1)).tilt_95_rad)
        for cycle_s in (0.45, 0.8)
        for slow in (with_cycle(juniper, cycle_s),)
    }
    told("quick small steps", f"tilt {tilts[0.8]:.2f} deg at 0.8 s a cycle -> {tilts[0.45]:.2f} at 0.45 s")
    assert tilts[0.45] < 0.7 * tilts[0.8]


def test_a_wide_stance_tilts_less(juniper: Robot) -> None:
    tilts, peaks = {}, {}
    for spread_m in (-0.02, 0.02):
        robot = replace(juniper, stance=replace(juniper.stance, spread_m=spread_m))
        tilts[spread_m] = math.degrees(rehearse(robot, walking(robot, 0.1)).tilt_95_rad)
        pushed = rehearse(robot, walking(robot, 0.1), push_ns=(0.0, 0.8), push_at_s=2.5)
        peaks[spread_m] = math.degrees(pushed.tilt_peak_rad)
    told(
        "a stance 40 mm wider on either side",
        f"tilt {tilts[-0.02]:.2f} -> {tilts[0.02]:.2f} deg",
        f"pushed aside {peaks[-0.02]:.1f} -> {peaks[0.02]:.1f} deg",
    )
    assert tilts[0.02] < 0.8 * tilts[-0.02]
    assert peaks[0.02] < peaks[-0.02]


def test_zero_errors_make_it_veer(juniper: Robot) -> None:
    straight = walking(juniper, 0.15)
    sound = math.degrees(rehearse(juniper, straight).drift_rad_m)
    drifts = [
        math.degrees(rehearse(juniper, straight, zero_error_rad=0.04, seed=seed).drift_rad_m)
        for seed in range(4)
    ]
    told(
        "joints zeroed wrongly by up to 2.3 deg",
        f"heading drift {sound:.1f} deg/m -> {', '.join(f'{drift:.1f}' for drift in drifts)}",
    )
    assert sorted(drifts)[len(drifts) // 2] > 2.0 * sound
    assert max(drifts) > 5.0


def test_a_shifted_battery_worsens_tilt(juniper: Robot) -> None:
    tilts = [
        math.degrees(rehearse(juniper, walking(juniper, 0.1), battery_shift_m=(x, 0.0, 0.0)).tilt_95_rad)
        for x in (0.0, -0.02, 0.02)
    ]
    told("a battery moved by 20 mm", f"tilt {tilts[0]:.2f} -> {tilts[1]:.2f} (back), {tilts[2]:.2f} (ahead)")
    assert min(tilts[1:]) > 1.3 * tilts[0]


@pytest.mark.parametrize("category", [0, 1])
def test_an_emergency_stop_from_full_speed_ends_without_tipping(juniper: Robot, category: int) -> None:
    """And on half the usual grip."""
    for friction in (0.8, 0.4):
        result = rehearse(juniper, f"emergency-{category}", friction=friction)
        told(
            f"emergency stop of category {category}, friction {friction}",
            f"peak tilt {math.degrees(result.tilt_peak_rad):.1f} deg",
        )
        assert not result.fell
