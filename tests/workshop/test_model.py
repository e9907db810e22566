"""The physics model agrees with the configuration: masses, geometry, joint order."""

from __future__ import annotations

import math
from dataclasses import replace

import mujoco
import numpy as np
import numpy.typing as npt
import pytest

from hobnail.errors import CommandError
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Leg, Robot
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.model import TIP_RADIUS_M, build
from hobnail.workshop.rehearse.plant import Plant
from workshop.machines import burdock, thistle

Floats = npt.NDArray[np.float64]


def about_x(angle: float) -> Floats:
    c, s = math.cos(angle), math.sin(angle)
    return np.array([[1, 0, 0], [0, c, -s], [0, s, c]])


def about_y(angle: float) -> Floats:
    c, s = math.cos(angle), math.sin(angle)
    return np.array([[c, 0, s], [0, 1, 0], [-s, 0, c]])


def points_of_leg(leg: Leg, q: Floats) -> tuple[Floats, Floats, Floats]:
    """Hip pitch axis, knee and foot, by the formula of the leg written out with matrices."""
    up = np.array([0.0, 0.0, 1.0])
    hip = np.array(leg.hip_m)
    pitch = hip + about_x(q[0]) @ np.array([0.0, leg.abduction_m, 0.0])
    knee = pitch + about_x(q[0]) @ about_y(q[1]) @ (-leg.upper_m * up)
    foot = knee + about_x(q[0]) @ about_y(q[1]) @ about_y(q[2]) @ (-leg.lower_m * up)
    return pitch, knee, foot


def random_angles(robot: Robot, seed: int) -> Floats:
    return np.random.default_rng(seed).uniform(-1.3, 1.3, len(robot.joints))


@pytest.mark.parametrize("robot", [thistle(), burdock()], ids=lambda robot: robot.name)
def test_feet_of_the_model_are_where_the_kinematics_put_them(robot: Robot) -> None:
    """Judges: the formula of the leg as rotation matrices, and hobnail's own closed form."""
    model = build(robot)
    data = mujoco.MjData(model.mujoco)
    for seed in range(20):
        q = random_angles(robot, seed)
        data.qpos[model.shaft_qpos] = q
        mujoco.mj_kinematics(model.mujoco, data)
        for index, leg in enumerate(robot.legs):
            mine = q[3 * index : 3 * index + 3]
            foot = data.geom_xpos[model.foot_geoms[index]]
            assert foot == pytest.approx(points_of_leg(leg, mine)[2], abs=1e-9)
            closed = np.array(leg.hip_m) + LegKinematics(leg).foot(*mine)
            assert foot == pytest.approx(closed, abs=1e-6)


def test_a_pointed_foot_ends_at_the_foot_point() -> None:
    pointed = replace(thistle(), legs=tuple(replace(leg, foot_radius_m=0.0) for leg in thistle().legs))
    model = build(pointed)
    data = mujoco.MjData(model.mujoco)
    mujoco.mj_kinematics(model.mujoco, data)
    tips = data.geom_xpos[model.foot_geoms, 2] - TIP_RADIUS_M
    assert tips == pytest.approx([-0.29] * 4, abs=1e-9)


@pytest.mark.parametrize("robot", [thistle(), burdock()], ids=lambda robot: robot.name)
def test_mass_and_centre_of_mass_are_those_of_the_parts(robot: Robot) -> None:
    model = build(robot)
    data = mujoco.MjData(model.mujoco)
    q = random_angles(robot, 3)
    data.qpos[model.shaft_qpos] = q
    mujoco.mj_forward(model.mujoco, data)
    moment = robot.body.mass_kg * np.array(robot.body.com_m)
    mass = robot.body.mass_kg
    for index, leg in enumerate(robot.legs):
        pitch, knee, foot = points_of_leg(leg, q[3 * index : 3 * index + 3])
        moment += leg.hip_kg * pitch + leg.upper_kg * (pitch + knee) / 2 + leg.lower_kg * (knee + foot) / 2
        mass += leg.hip_kg + leg.upper_kg + leg.lower_kg
    assert float(np.sum(model.mujoco.body_mass)) == pytest.approx(mass, rel=1e-12)
    assert robot.mass_kg == pytest.approx(mass, rel=1e-12)
    assert data.subtree_com[model.trunk_body] == pytest.approx(moment / mass, abs=1e-9)


def test_joint_order_is_the_robots() -> None:
    """Moving joint i alone moves only the leg that joint i belongs to."""
    robot = burdock()
    plant = Plant(robot)
    for index in range(len(robot.joints)):
        angles = [0.0] * len(robot.joints)
        angles[index] = 0.3
        plant.place(angles, clear_m=1.0)
        assert plant.probe().joints_rad == pytest.approx(angles)
        feet = plant.probe().feet_m - plant.probe().position_m
        rest = np.array([np.array(leg.hip_m) + LegKinematics(leg).foot(0, 0, 0) for leg in robot.legs])
        moved = np.linalg.norm(feet - rest, axis=1) > 1e-6
        assert moved.tolist() == [leg == index // 3 for leg in range(4)]


def test_backlash_lets_the_link_move_within_the_play_only() -> None:
    sloppy = replace(
        thistle(),
        legs=tuple(
            replace(
                leg,
                joints=tuple(replace(j, servo=replace(j.servo, backlash_rad=0.02)) for j in leg.joints),  # type: ignore[arg-type]
            )
            for leg in thistle().legs
        ),
    )
    plant = Plant(sloppy)
    plant.place([a for leg in sloppy.legs for a in (0.0, -leg.knee * 0.5, leg.knee * 1.0)])
    plant.advance(1500)
    play = plant.joints_rad() - plant._d.qpos[plant.model.shaft_qpos]
    # The knees carry, so each lies at the end of its play, on the side that bends further.
    assert play[2::3] == pytest.approx(np.full(4, 0.01), abs=0.0005)
    assert np.all(np.abs(play) <= 0.0105)


class TestDisturbances:
    def test_a_sound_robot_is_left_as_it_is(self) -> None:
        robot = burdock()
        assert Disturbances().applied_to(robot) == robot
        assert Disturbances().described() == {}

    def test_errors_stay_within_their_bounds_and_hit_all_parts(self) -> None:
        robot = burdock()
        real = Disturbances(zero_error_rad=0.05, length_error_m=0.004, seed=7).applied_to(robot)
        trims = [j.trim_rad for j in real.joints]
        assert all(0.0 < abs(trim) <= 0.05 for trim in trims)
        assert len(set(trims)) == len(trims)
        for leg, sound in zip(real.legs, robot.legs, strict=True):
            assert 0.0 < abs(leg.upper_m - sound.upper_m) <= 0.004
            assert 0.0 < abs(leg.lower_m - sound.lower_m) <= 0.004
            assert 0.0 < abs(leg.abduction_m - sound.abduction_m) <= 0.004

    def test_the_battery_moves_the_centre_of_mass(self) -> None:
        real = Disturbances(battery_shift_m=(0.01, -0.02, 0.0)).applied_to(burdock())
        assert real.body.com_m == pytest.approx((0.002, -0.017, 0.0))

    def test_a_weak_servo_is_the_one_named(self) -> None:
        real = Disturbances(weak_servo=0.25, weak_joint="left-front.knee").applied_to(burdock())
        weak = {j.name for j in real.joints if j.servo.torque_nm < 1.0}
        assert weak == {"left-front.knee"}

    @pytest.mark.parametrize(
        ("name", "value"),
        [
            ("friction", -1.0),
            ("slope_rad", math.nan),
            ("lost_frames", 1.5),
            ("weak_servo", 2.0),
            ("seed", -1),
        ],
    )
    def test_values_out_of_range_are_told(self, name: str, value: float) -> None:
        with pytest.raises(CommandError, match=f"{name} is .*allowed"):
            Disturbances(**{name: value})  # type: ignore[arg-type]

    def test_an_unknown_joint_is_told_with_the_names(self) -> None:
        with pytest.raises(CommandError, match=r"left-front\.roll"):
            Disturbances(weak_servo=0.5, weak_joint="tail").applied_to(burdock())
