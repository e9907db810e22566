"""Measures and verdicts on walks drawn by hand, where the answer is known."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import expm

from hobnail.robot import Vec3
from hobnail.workshop.rehearse import Disturbances, Limits, Recording, measure, walking
from hobnail.workshop.rehearse.measures import twist_between
from workshop.machines import burdock

DT = 0.01
CYCLE = 40  # ticks


def drawn(
    asked: Vec3,
    done: Vec3,
    *,
    ticks: int = 800,
    sway_m: float = 0.0,
    tilt_rad: float = 0.0,
) -> Recording:
    """A perfect trot of 0.4 s with the velocity `done`, recorded where `asked` was commanded."""
    robot = burdock()
    t = np.arange(ticks, dtype=np.float64) * DT
    pose = np.zeros((ticks, 3))
    for k in range(ticks):
        moved = expm(t[k] * np.array([[0, -done[2], done[0]], [done[2], 0, done[1]], [0, 0, 0]], dtype=float))
        pose[k] = moved[0, 2], moved[1, 2], done[2] * t[k]
    sway = sway_m * np.sin(2 * np.pi * t / (CYCLE * DT))
    position = np.column_stack((pose[:, 0], pose[:, 1] + sway, np.full(ticks, 0.12)))
    c, s = np.cos(pose[:, 2]), np.sin(pose[:, 2])
    rotation = np.zeros((ticks, 3, 3))
    rotation[:, 0, 0], rotation[:, 0, 1], rotation[:, 1, 0], rotation[:, 1, 1] = c, -s, s, c
    rotation[:, 2, 2] = math.cos(tilt_rad)
    phase = (np.arange(ticks) % CYCLE) / CYCLE
    pair = phase < 0.6
    other = (phase + 0.5) % 1.0 < 0.6
    stance = np.column_stack((pair, other, other, pair))
    walking_all = np.ones(ticks, dtype=bool)
    return Recording(
        robot=robot,
        scenario=walking(robot, *asked),
        disturbances=Disturbances(),
        time_s=t,
        true_position_m=position,
        true_rotation=rotation,
        true_velocity_m_s=np.gradient(position, DT, axis=0),
        true_joints_rad=np.zeros((ticks, 12)),
        true_feet_m=np.zeros((ticks, 4, 3)),
        foot_force_n=np.where(stance, 6.0, 0.0),
        foot_slip_m_s=np.where(stance, 0.02, 0.0),
        torque_nm=np.full((ticks, 12), -0.5),
        peak_torque_nm=np.full((ticks, 12), 0.6),
        power_w=np.full(ticks, 5.0),
        supply_v=np.full(ticks, 6.0),
        trunk_touches=np.zeros(ticks, dtype=bool),
        joints_rad=np.zeros((ticks, 12)),
        stance=stance,
        command=np.tile(asked, (ticks, 1)).astype(float),
        pose=pose,
        velocity=np.tile(done, (ticks, 1)).astype(float),
        slowdown=np.ones(ticks),
        height_m=np.full(ticks, robot.stance.height_m),
        state=("walking",) * ticks,
        gait=("trot",) * ticks,
        walking=walking_all,
        posed=np.zeros(ticks, dtype=bool),
        powered=walking_all,
        clamped=0,
        out_of_reach=0,
        lost_frames=0,
        route_failure="",
        faults=(),
        wall_s=1.0,
        controller_wall_s=0.1,
    )


@pytest.mark.parametrize(
    "twist", [(0.2, 0.0, 0.0), (-0.1, 0.05, 0.3), (0.0, 0.0, 2.0), (0.1, 0.0, 1e-12), (0.3, -0.2, -5.0)]
)
def test_the_twist_between_two_poses_is_the_one_that_was_held(twist: Vec3) -> None:
    """Judge: scipy's matrix exponential."""
    vx, vy, w = twist
    start = np.array([0.3, -0.2, 0.7])
    c, s = math.cos(start[2]), math.sin(start[2])
    held = expm(0.5 * np.array([[0, -w, vx], [w, 0, vy], [0, 0, 0]]))
    x, y = np.array([[c, -s], [s, c]]) @ held[:2, 2]
    end = start + np.array([x, y, 0.5 * w])
    assert twist_between(start, end, 0.5) == pytest.approx(twist, abs=1e-9)


def test_a_walk_as_commanded_passes() -> None:
    result = measure(drawn((0.1, 0.05, 0.2), (0.1, 0.05, 0.2)))
    (stretch,) = result.stretches
    assert stretch.true == pytest.approx((0.1, 0.05, 0.2), abs=1e-9)
    assert stretch.cycle_s == pytest.approx(0.4)
    assert stretch.cycles >= 15
    assert result.failures() == []
    assert result.odometry_error_m == pytest.approx(0.0, abs=1e-9)


def test_sway_within_the_cycle_is_no_error_and_no_way() -> None:
    result = measure(drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0), sway_m=0.01))
    assert result.stretches[0].true == pytest.approx((0.1, 0.0, 0.0), abs=1e-9)
    assert result.way_m == pytest.approx(0.1 * 7.99, rel=1e-3)


def test_a_slow_walk_misses_by_its_speed() -> None:
    result = measure(drawn((0.2, 0.0, 0.0), (0.17, 0.0, 0.0)))
    assert result.stretches[0].speed_error_m_s == pytest.approx(0.03)
    assert result.speed_error == pytest.approx(0.15)
    (failure,) = result.failures()
    assert "0.170" in failure
    assert "0.200" in failure
    assert "allowed" in failure
    assert result.failures(Limits(error_share=0.2)) == []


def test_a_veering_walk_drifts_by_the_metre() -> None:
    result = measure(drawn((0.2, 0.0, 0.0), (0.2, 0.0, 0.007)))
    assert result.drift_rad_m == pytest.approx(0.007 / 0.2)
    assert [failure for failure in result.failures() if "drift" in failure]


def test_drift_over_less_than_a_metre_is_chance() -> None:
    short = measure(drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.01)))
    assert short.drift_rad_m == pytest.approx(0.1)
    assert short.failures() == []


def test_straightness_is_asked_of_straight_walks_in_every_direction_and_of_no_other() -> None:
    assert measure(drawn((0.0, 0.1, 0.0), (0.0, 0.1, 0.01))).drift_rad_m == pytest.approx(0.1)
    assert measure(drawn((-0.3, 0.4, 0.0), (-0.3, 0.4, 0.01))).drift_rad_m == pytest.approx(0.02)
    assert measure(drawn((0.1, 0.0, 0.5), (0.1, 0.0, 0.51))).drift_rad_m == 0.0


def test_turning_too_far_is_told() -> None:
    result = measure(drawn((0.0, 0.0, 0.5), (0.0, 0.0, 0.54)))
    assert result.turn_error == pytest.approx(0.08)
    assert "turn rate" in result.failures()[0]


def test_tilt_is_the_angle_of_the_trunk_from_level() -> None:
    result = measure(drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0), tilt_rad=math.radians(4.0)))
    assert result.tilt_95_rad == pytest.approx(math.radians(4.0), abs=1e-6)
    assert "tilt is 4.0 deg" in result.failures()[0]
    leaning = drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0), tilt_rad=math.radians(4.0))
    leaning = replace(leaning, posed=np.ones(len(leaning.time_s), dtype=bool))
    assert measure(leaning).tilt_95_rad == 0.0


def test_tipping_over_is_a_fall_and_so_is_a_trunk_on_the_floor() -> None:
    tipped = measure(drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0), tilt_rad=math.radians(50.0)))
    assert tipped.fell
    assert "tipped" in tipped.failures()[0]
    recording = drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0))
    touches = np.arange(len(recording.time_s)) == 300
    sat = measure(replace(recording, trunk_touches=touches))
    assert sat.fell
    assert "3.00 s" in sat.why_fell
    resting = replace(recording, trunk_touches=touches, state=("resting",) * len(recording.time_s))
    assert not measure(resting).fell


def test_slip_scuffs_load_and_energy() -> None:
    recording = drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0))
    result = measure(recording)
    # Each foot slides at 0.02 m/s for 0.6 of the time, on 0.1 m/s of way.
    assert result.slip_m_m == pytest.approx(0.02 * 0.6 / 0.1, rel=0.02)
    assert result.scuffs == 0
    assert result.swings >= 70
    assert result.mean_torque_nm == pytest.approx(0.5)
    stall = recording.robot.joints[0].servo.torque_nm
    assert result.peak_load == pytest.approx(0.6 / stall)
    assert result.energy_j_m == pytest.approx(5.0 / 0.1, rel=0.01)
    dragging = replace(recording, foot_force_n=np.full_like(recording.foot_force_n, 6.0))
    assert measure(dragging).scuffs == result.swings


def test_a_clamp_a_fault_and_a_failed_route_are_told() -> None:
    recording = replace(
        drawn((0.1, 0.0, 0.0), (0.1, 0.0, 0.0)), clamped=2, faults=("bus-error",), route_failure="step 3 ..."
    )
    failures = measure(recording).failures()
    assert len(failures) == 3
    assert "bus-error" in " ".join(failures)
