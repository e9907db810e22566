"""The physics keeps to mechanics worked out by hand: momentum, energy, sag, friction, torque-speed line."""

from __future__ import annotations

import math
from dataclasses import replace

import mujoco
import numpy as np
import pytest

from hobnail.robot import Robot
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.model import FRICTION_SHARE, GRAVITY_M_S2, STEP_S
from hobnail.workshop.rehearse.plant import Plant, half_dead_band_rad
from workshop.machines import burdock, thistle

HIGH_M = 20.0  # nothing falls so far in these tests


def crouch(robot: Robot, bend: float = 0.6) -> list[float]:
    return [angle for leg in robot.legs for angle in (0.0, -leg.knee * bend, leg.knee * 2 * bend)]


def middle(robot: Robot, offset: float = 0.0) -> list[float]:
    """Every joint so far from the middle of its servo's range."""
    return [joint.zero_rad + offset for joint in robot.joints]


def without_friction(plant: Plant) -> None:
    plant.model.mujoco.dof_frictionloss[:] = 0.0


def on_a_bench(robot: Robot) -> Plant:
    """Trunk so heavy that it is a bench, no weight, no friction in the gears."""
    plant = Plant(replace(robot, body=replace(robot.body, mass_kg=1e6)))
    plant.model.mujoco.opt.gravity[:] = 0.0
    without_friction(plant)
    return plant


def test_momentum_in_the_air_is_changed_by_weight_alone() -> None:
    """Newton: whatever the legs do, the centre of mass falls freely and spin is kept."""
    robot = thistle()
    plant = Plant(robot)
    plant.place(crouch(robot), clear_m=HIGH_M)
    m, d = plant.model.mujoco, plant._d
    start = d.subtree_com[plant.model.trunk_body].copy()
    for step in range(30):
        plant.command([a + 0.6 * math.sin(0.3 * step + k) for k, a in enumerate(crouch(robot))])
        plant.advance(10)
    mujoco.mj_forward(m, d)
    mujoco.mj_subtreeVel(m, d)
    fallen = d.subtree_com[plant.model.trunk_body] - start
    momentum = d.subtree_linvel[plant.model.trunk_body] * robot.mass_kg
    spin = d.subtree_angmom[plant.model.trunk_body]
    assert fallen == pytest.approx([0.0, 0.0, -GRAVITY_M_S2 * 0.3**2 / 2], abs=1e-3)
    assert momentum == pytest.approx([0.0, 0.0, -robot.mass_kg * GRAVITY_M_S2 * 0.3], abs=0.02)
    assert spin == pytest.approx([0.0, 0.0, 0.0], abs=2e-3)  # a leg's own is some 0.03


def test_energy_is_kept_where_nothing_takes_it() -> None:
    """Limp legs, no friction, no damping, thrown in the air: kinetic plus potential stays (the
    step adds m g times half a step of free fall, which is accounted for)."""
    robot = burdock()
    plant = Plant(robot)
    plant.place(crouch(robot), clear_m=HIGH_M)
    plant.command([None] * 12)
    without_friction(plant)
    plant.model.mujoco.dof_damping[:] = 0.0
    plant.model.mujoco.jnt_range[1:] = (-100.0, 100.0)  # the stops of the servos would take some
    plant._d.qvel[plant.model.shaft_dof] = np.random.default_rng(1).uniform(-6.0, 6.0, 12)
    before = plant.energy_j()
    assert before[0] > 0.05
    plant.advance(300)
    after = plant.energy_j()
    stepped = robot.mass_kg * GRAVITY_M_S2 * GRAVITY_M_S2 * 0.3 * STEP_S / 2
    assert sum(after) == pytest.approx(sum(before) - stepped, abs=0.02 * before[0])
    assert after[0] > 4.0 * before[0]  # it fell 0.44 m


def test_work_of_the_servos_is_never_less_than_what_they_lift() -> None:
    """Standing up from a crouch: electric energy is more than the weight's gain in height."""
    robot = thistle()
    plant = Plant(robot)
    plant.place(crouch(robot, 0.9))
    plant.advance(500)
    plant.probe()
    low = sum(plant.energy_j())
    spent = 0.0
    for step in range(100):
        plant.command(crouch(robot, 0.9 - 0.4 * (step + 1) / 100))
        plant.advance(10)
        spent += plant.probe().mean_power_w * 0.01
    gained = sum(plant.energy_j()) - low
    assert gained > 1.0
    assert spent > gained


def test_static_sag_is_torque_over_stiffness() -> None:
    """Hand calculation: on a floor all but free of friction each foot pushes straight up; the
    moments of that push and of the links' weights about knee and hip give the torques, and
    torque over stiffness, beyond half the dead band, the sag."""
    robot = burdock()
    robot = replace(robot, body=replace(robot.body, com_m=(0.0, 0.0, 0.0)))
    plant = Plant(robot, Disturbances(friction=0.01))
    without_friction(plant)
    target = crouch(robot)
    plant.place(target)
    plant.advance(4000)
    probe = plant.probe()
    servo = robot.joints[0].servo
    assert servo.stiffness_nm_rad is not None
    for index, leg in enumerate(robot.legs):
        _, hip, knee = probe.joints_rad[3 * index : 3 * index + 3]
        push = probe.foot_force_n[index]
        upper_x = -leg.upper_m * math.sin(hip)
        lower_x = -leg.lower_m * math.sin(hip + knee)
        lower_n, upper_n = leg.lower_kg * GRAVITY_M_S2, leg.upper_kg * GRAVITY_M_S2
        # Torque about y of an upward force f at x is -x f; the servo bears the opposite.
        knee_nm = -(-lower_x * push + lower_x / 2 * lower_n)
        hip_nm = -(-(upper_x + lower_x) * push + (upper_x + lower_x / 2) * lower_n + upper_x / 2 * upper_n)
        for angle, torque, wanted in ((hip, hip_nm, target[1]), (knee, knee_nm, target[2])):
            assert abs(torque) > 0.05
            sag = torque / servo.stiffness_nm_rad
            sag += math.copysign(half_dead_band_rad(robot.joints[0]), torque)
            assert wanted - angle == pytest.approx(sag, rel=0.05)
    assert sum(probe.foot_force_n) == pytest.approx(robot.mass_kg * GRAVITY_M_S2, rel=1e-3)


@pytest.mark.parametrize("supply_v", [6.0, 4.8])
def test_no_load_speed_and_stall_torque_scale_with_the_supply(supply_v: float) -> None:
    """Data sheet of a servo: speed without load and torque at stall, at its rated voltage; a
    direct-current motor's both go with the voltage."""
    robot = burdock()  # rated at 6 V
    plant = on_a_bench(robot)
    plant.supply_v = supply_v
    plant._set_strength()
    plant.place(middle(robot, -1.4), clear_m=HIGH_M)
    plant.command(middle(robot, 1.4))
    fastest = 0.0
    for _ in range(250):
        plant.advance(1)
        fastest = max(fastest, float(np.max(plant._d.qvel[plant.model.shaft_dof])))
    servo = robot.joints[0].servo
    assert fastest == pytest.approx(servo.speed_rad_s * supply_v / servo.rated_v, rel=0.03)
    # Blocked: held so far from its target that the drive is full, at no speed.
    plant.place(middle(robot), clear_m=HIGH_M)
    plant.command(middle(robot, 1.4))
    plant.model.mujoco.dof_armature[plant.model.shaft_dof] = 1e6
    plant.advance(5)
    torque = plant.probe().torque_nm
    assert torque == pytest.approx(np.full(12, servo.torque_nm * supply_v / servo.rated_v), rel=1e-3)


def test_electric_power_at_stall_is_torque_times_no_load_speed() -> None:
    """Ideal motor: at stall all power is heat, V * V / R = stall torque * no-load speed; at no
    load none is drawn."""
    robot = burdock()
    plant = on_a_bench(robot)
    plant.place(middle(robot), clear_m=HIGH_M)
    plant.command(middle(robot, 1.4))
    plant.model.mujoco.dof_armature[plant.model.shaft_dof] = 1e6
    plant.advance(10)
    servo = robot.joints[0].servo
    assert plant.probe().mean_power_w == pytest.approx(12 * servo.torque_nm * servo.speed_rad_s, rel=0.01)


def test_nothing_moves_within_the_dead_band() -> None:
    robot = burdock()
    plant = on_a_bench(robot)
    band = half_dead_band_rad(robot.joints[0])
    assert band == pytest.approx(math.pi / 2000 * 5.0 / 2)  # 5 us wide, 2000 us for half a turn
    plant.place(middle(robot), clear_m=HIGH_M)
    plant.command(middle(robot, 0.99 * band))
    plant.advance(200)
    assert plant.joints_rad() == pytest.approx(middle(robot), abs=1e-12)
    plant.command(middle(robot, 10 * band))
    plant.advance(500)
    assert plant.joints_rad() == pytest.approx(middle(robot, 10 * band), abs=1.001 * band)


def test_gear_friction_holds_a_limp_leg_until_its_share_of_the_stall_torque() -> None:
    robot = thistle()
    plant = Plant(replace(robot, body=replace(robot.body, mass_kg=1e6)))
    plant.model.mujoco.opt.gravity[:] = 0.0
    plant.place(middle(robot), clear_m=HIGH_M)
    plant.command([None] * 12)
    limit = FRICTION_SHARE * robot.joints[0].servo.torque_nm
    for share, moves in ((0.9, False), (1.5, True)):
        plant._d.qfrc_applied[plant.model.shaft_dof] = 0.0
        knee = plant.model.shaft_dof[2]
        for _ in range(100):
            # Applied behind the servo law's back, as a hand would.
            plant._d.qfrc_applied[knee] = share * limit
            mujoco.mj_step(plant.model.mujoco, plant._d)
        assert (abs(plant.joints_rad()[2] - middle(robot)[2]) > 0.02) == moves


def test_without_pulses_the_robot_sinks_onto_its_belly() -> None:
    robot = thistle()
    plant = Plant(robot)
    plant.place(crouch(robot))
    plant.advance(300)
    standing = plant.probe()
    plant.command([None] * 12)
    plant.advance(1500)
    lying = plant.probe()
    assert not standing.trunk_touches
    assert lying.trunk_touches
    assert lying.position_m[2] < standing.position_m[2] - 0.03


@pytest.mark.parametrize("share", [0.9, 1.2])
def test_a_slope_holds_below_the_friction_angle_and_slides_above(share: float) -> None:
    """Coulomb: on a slope of angle a, sliding begins at tan a = mu, and then accelerates with
    g (sin a - mu cos a)."""
    friction = 0.2
    slope = share * math.atan(friction)
    robot = burdock()
    plant = Plant(robot, Disturbances(friction=friction, slope_rad=slope))
    plant.place(crouch(robot))
    plant.advance(1000)
    first = plant.probe()
    plant.advance(500)
    second = plant.probe()
    if share < 1.0:
        assert abs(second.position_m[0] - first.position_m[0]) < 0.001
    else:
        gained = second.velocity_m_s[0] - first.velocity_m_s[0]
        expected = -GRAVITY_M_S2 * (math.sin(slope) - friction * math.cos(slope)) * 0.5
        assert gained == pytest.approx(expected, rel=0.05)


def test_a_rolling_foot_does_not_slip() -> None:
    """The body leans ahead over its feet: the foot balls roll, their centres move, nothing slides."""
    robot = burdock()
    plant = Plant(robot, Disturbances(friction=3.0))
    plant.place(crouch(robot))
    plant.advance(800)
    start = plant.probe()
    slid = np.zeros(4)
    for step in range(200):
        lean = 0.15 * (step + 1) / 200
        plant.command([a + (lean if k % 3 == 1 else 0.0) for k, a in enumerate(crouch(robot))])
        plant.advance(5)
        slid += plant.probe().foot_slip_m_s * 0.005
    rolled = np.linalg.norm((plant.probe().feet_m - start.feet_m)[:, :2], axis=1)
    assert np.all(rolled > 0.001)
    assert np.all(slid < 0.25 * rolled)


def test_a_push_gives_its_impulse() -> None:
    robot = thistle()
    plant = Plant(robot, Disturbances(push_ns=(0.3, -0.6), push_at_s=0.1))
    plant.model.mujoco.opt.gravity[:] = 0.0
    plant.place(crouch(robot), clear_m=HIGH_M)
    plant.advance(300)
    mujoco.mj_subtreeVel(plant.model.mujoco, plant._d)
    momentum = plant._d.subtree_linvel[plant.model.trunk_body] * robot.mass_kg
    assert momentum == pytest.approx([0.3, -0.6, 0.0], abs=0.01)


def test_a_weak_supply_sags_under_load() -> None:
    robot = thistle()
    plant = Plant(robot, Disturbances(supply_ohm=0.2))
    plant.place(crouch(robot))
    for _ in range(50):
        plant.advance(10)
        plant.probe()
    plant.advance(10)
    probe = plant.probe()
    expected = robot.supply.nominal_v - 0.2 * probe.mean_power_w / probe.supply_v
    assert probe.supply_v < robot.supply.nominal_v - 0.01
    assert probe.supply_v == pytest.approx(expected, abs=0.05)


def test_the_same_commands_give_the_same_bits() -> None:
    robot = burdock()

    def journey() -> list[bytes]:
        plant = Plant(robot, Disturbances(roughness_m=0.004, zero_error_rad=0.02, seed=5))
        plant.place(crouch(robot))
        states = []
        for step in range(40):
            plant.command([a + 0.1 * math.sin(0.4 * step + k) for k, a in enumerate(crouch(robot))])
            plant.advance(10)
            states.append(plant._d.qpos.tobytes() + plant._d.qvel.tobytes())
        return states

    assert journey() == journey()
