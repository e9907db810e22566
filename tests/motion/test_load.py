"""Feed-forward for load, trailing and rolling against pinocchio, springs and a rolling ball; m, rad, N."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.optimize import minimize, root

from hobnail.controller import Controller, Tick
from hobnail.motion.leg import LegKinematics
from hobnail.motion.load import LegCorrection, half_dead_band_rad
from hobnail.robot import Leg, Robot, Servo, Vec3
from pinocchio_judge import RobotJudge
from robots import anvil, bramble, examples, juniper, make_joint
from walks import vec3

Array = NDArray[np.float64]
ROBOTS = pytest.mark.parametrize("robot", [juniper(), bramble(), anvil()], ids=lambda robot: robot.name)
angles_near = st.tuples(st.floats(-0.4, 0.4), st.floats(-0.4, 0.4), st.floats(-0.5, 0.5))
STILL = (0.0, 0.0, 0.0)
UNLOADED = (0.0, 0.0, 0.0, 0.0)
forces = st.tuples(st.floats(-5.0, 5.0), st.floats(-5.0, 5.0), st.floats(0.0, 30.0))


def plain(robot: Robot, *, radius_m: float = 0.0) -> Robot:
    """The robot with pointed feet (or round ones) and servos without slack."""

    def leg_of(leg: Leg) -> Leg:
        roll, hip, knee = (
            replace(joint, servo=replace(joint.servo, dead_band_us=0.0, backlash_rad=0.0))
            for joint in leg.joints
        )
        return replace(leg, foot_radius_m=radius_m, joints=(roll, hip, knee))

    return replace(robot, legs=tuple(leg_of(leg) for leg in robot.legs))


@cache
def neutral_rad(robot: Robot) -> tuple[Vec3, ...]:
    """Geometric joint angles of the neutral stance."""
    return Controller(robot).tick(robot.period_s).joints_rad


@cache
def judge_of(robot: Robot) -> RobotJudge:
    """The outside judge of a robot, made once."""
    return RobotJudge(robot)


@cache
def corrections(robot: Robot) -> list[LegCorrection]:
    """Of each leg, about the neutral stance."""
    return [
        LegCorrection(leg, LegKinematics(leg), angles)
        for leg, angles in zip(robot.legs, neutral_rad(robot), strict=True)
    ]


def loaded(correction: LegCorrection, leg: Leg, angles: Vec3, force: Vec3) -> Vec3:
    """What a leg that stands still under a load is sent."""
    return correction.command(angles, STILL, foot_of(leg, angles), 1.0, (*force, 0.0))


def foot_of(leg: Leg, angles: Vec3) -> Vec3:
    """Where the foot is (body frame)."""
    return vec3(np.array(LegKinematics(leg).foot(*angles)) + np.array(leg.hip_m))


def held_torques(robot: Robot, leg: int, angles: Vec3, force: Vec3) -> Array:
    """The torques (N m) that stiff servos without slack are taken to hold: how far off the
    angles they are sent, by their stiffness."""
    assert robot.legs[leg].foot_radius_m == 0.0
    stiffness = [joint.servo.stiffness_nm_rad for joint in robot.legs[leg].joints]
    sent = loaded(corrections(robot)[leg], robot.legs[leg], angles, force)
    return np.asarray(np.array(stiffness) * (np.array(sent) - np.array(angles)))


# ---- sag


@ROBOTS
@examples(40)
@given(off=angles_near, force=forces, leg=st.integers(0, 3))
def test_torques_agree_with_pinocchio(robot: Robot, off: Vec3, force: Vec3, leg: int) -> None:
    """What holds the links' weight against gravity, less what the ground's push does: g(q) - J' f."""
    robot = plain(robot)
    joints = [list(angles) for angles in neutral_rad(robot)]
    joints[leg] = [a + b for a, b in zip(joints[leg], off, strict=True)]
    judge = judge_of(robot)
    held = judge.static_torques(joints)[leg] - judge.foot_jacobian(joints, leg).T @ np.array(force)
    roll, hip, knee = joints[leg]
    assert held_torques(robot, leg, (roll, hip, knee), force) == pytest.approx(held, abs=1e-9)


@ROBOTS
@examples(40)
@given(off=angles_near, force=forces, leg=st.integers(0, 3))
def test_a_round_foot_is_pushed_at_its_underside(robot: Robot, off: Vec3, force: Vec3, leg: int) -> None:
    """By what a push changes: what rolling asks for is the same with and without."""
    robot = plain(robot, radius_m=0.015)
    joints = [list(angles) for angles in neutral_rad(robot)]
    joints[leg] = [a + b for a, b in zip(joints[leg], off, strict=True)]
    roll, hip, knee = joints[leg]
    pushed, free = (
        np.array(loaded(corrections(robot)[leg], robot.legs[leg], (roll, hip, knee), each))
        for each in (force, STILL)
    )
    stiffness = np.array([joint.servo.stiffness_nm_rad for joint in robot.legs[leg].joints])
    held = -judge_of(robot).foot_jacobian(joints, leg, 0.015).T @ np.array(force)
    assert stiffness * (pushed - free) == pytest.approx(held, abs=1e-9)


@ROBOTS
@examples(20)
@given(off=angles_near, force=forces)
def test_a_springy_leg_so_commanded_rests_where_it_should(robot: Robot, off: Vec3, force: Vec3) -> None:
    """Each servo a spring between command and shaft: scipy finds where torques are in balance."""
    robot = plain(robot)
    judge = judge_of(robot)
    others = [list(angles) for angles in neutral_rad(robot)]
    roll, hip, knee = (a + b for a, b in zip(others[0], off, strict=True))
    commanded = loaded(corrections(robot)[0], robot.legs[0], (roll, hip, knee), force)
    stiffness = np.array([joint.servo.stiffness_nm_rad for joint in robot.legs[0].joints])

    def unbalance(angles: Array) -> Array:
        joints = [list(angles), *others[1:]]
        held = judge.static_torques(joints)[0] - judge.foot_jacobian(joints, 0).T @ np.array(force)
        return np.asarray(stiffness * (np.array(commanded) - angles) - held)

    found = root(unbalance, np.array(commanded), tol=1e-12)
    assert found.success
    assert found.x == pytest.approx([roll, hip, knee], abs=1e-8)


def resting_pose(robot: Robot, tick: Tick, commanded: tuple[Vec3, ...]) -> Array:
    """Where the body of that tick comes to rest (x, y, height; roll, pitch, yaw), feet held where they stand,
    every servo a spring: the least of spring and gravity's energy, by scipy."""
    ground = np.array(tick.feet_m) + np.array([0.0, 0.0, robot.stance.height_m])
    judge = judge_of(robot)
    legs = [LegKinematics(leg) for leg in robot.legs]

    def energy(scaled: Array) -> float:
        pose = scaled * np.array([1e-3, 1e-3, 1e-3, 1e-2, 1e-2, 1e-2])
        c, s = np.cos(pose[3:]), np.sin(pose[3:])
        turn = (
            np.array([[c[2], -s[2], 0], [s[2], c[2], 0], [0, 0, 1]])
            @ np.array([[c[1], 0, s[1]], [0, 1, 0], [-s[1], 0, c[1]]])
            @ np.array([[1, 0, 0], [0, c[0], -s[0]], [0, s[0], c[0]]])
        )
        place = pose[:3] + np.array([0.0, 0.0, robot.stance.height_m])
        joints, springs = [], 0.0
        for leg, kinematics, foot, command in zip(robot.legs, legs, ground, commanded, strict=True):
            x, y, z = turn.T @ (foot - place) - np.array(leg.hip_m)
            angles = kinematics.angles(float(x), float(y), float(z))
            joints.append(angles)
            for joint, wanted, angle in zip(leg.joints, command, angles, strict=True):
                springs += 0.5 * (joint.servo.stiffness_nm_rad or 0.0) * (wanted - angle) ** 2
        com = place + turn @ np.array(judge.centre_of_mass(joints))
        return springs + robot.mass_kg * 9.81 * float(com[2])

    found = minimize(energy, np.zeros(6), method="BFGS", options={"gtol": 1e-7})
    return np.asarray(found.x * np.array([1.0, 1.0, 1.0, 1e-2, 1e-2, 1e-2]))  # mm, rad


@ROBOTS
def test_a_springy_robot_so_commanded_stands_level_at_its_height(robot: Robot) -> None:
    """The whole robot on springs: with the feed-forward within a tenth of a millimetre, without
    it several times farther down."""
    robot = plain(robot)
    tick = Controller(robot).tick(robot.period_s)
    helped = resting_pose(robot, tick, tick.commanded_rad)
    bare = resting_pose(robot, tick, tick.joints_rad)
    print(f"{robot.name}: sags {-bare[2]:.2f} mm, with feed-forward {-helped[2]:.3f} mm")
    assert bare[2] < -0.3
    assert abs(helped[2]) < 0.1
    assert np.abs(helped[:2]).max() < 0.2
    assert np.abs(helped[3:]).max() < math.radians(0.1)


@ROBOTS
def test_a_springy_robot_that_leans_stays_level(robot: Robot) -> None:
    """Leaning ahead and to the left, feet there carry more: the body tilts by a fifth at most of what
    it would without feed-forward."""
    robot = plain(robot)
    controller = Controller(robot)
    lean = 0.6 * robot.posture_limits.lean_m
    controller.posture(lean_m=(lean, lean))
    tick = controller.tick(robot.period_s)
    while not tick.settled:
        tick = controller.tick(robot.period_s)
    helped = resting_pose(robot, tick, tick.commanded_rad)
    bare = resting_pose(robot, tick, tick.joints_rad)
    tilts = [math.degrees(float(np.hypot(*pose[3:5]))) for pose in (helped, bare)]
    print(f"{robot.name} leans: tilts {tilts[1]:.3f} deg, with feed-forward {tilts[0]:.3f} deg")
    assert tilts[0] < 0.2 * tilts[1]


def test_unknown_stiffness_is_left_alone() -> None:
    """None: no sag is compensated."""
    robot = plain(juniper())
    legs = tuple(
        replace(
            leg,
            joints=(
                replace(leg.joints[0], servo=replace(leg.joints[0].servo, stiffness_nm_rad=None)),
                replace(leg.joints[1], servo=replace(leg.joints[1].servo, stiffness_nm_rad=None)),
                replace(leg.joints[2], servo=replace(leg.joints[2].servo, stiffness_nm_rad=None)),
            ),
        )
        for leg in robot.legs
    )
    tick = Controller(replace(robot, legs=legs)).tick(0.01)
    assert tick.commanded_rad == tick.joints_rad


# ---- rolling


@ROBOTS
@pytest.mark.parametrize("sideways", [False, True], ids=["ahead", "sideways"])
def test_a_round_foot_rolls_without_slip_under_a_body_that_goes_straight(
    robot: Robot, sideways: bool
) -> None:
    """A ball on the ground, fixed to the shank, integrated over a stance: its centre goes on by
    the radius times its turn.  So the body goes as far as it was told and nowhere else, to a quarter
    of what it would be off without the correction, and stays at its height."""
    radius = 0.012
    robot = plain(robot, radius_m=radius)
    leg = robot.legs[0]
    kinematics = LegKinematics(leg)
    neutral_angles = neutral_rad(robot)[0]
    round_foot, pointed = (
        LegCorrection(each, kinematics, neutral_angles) for each in (leg, replace(leg, foot_radius_m=0.0))
    )
    neutral = np.array(kinematics.foot(*neutral_angles))
    sweep = np.linspace(0.25, -0.25, 401) * robot.stance.height_m
    axis = 1 if sideways else 0
    worst = {}
    for corrected in (True, False):
        centres, turns = [], []
        for ahead in sweep:
            at = neutral.copy()
            at[axis] += ahead
            x, y, z = (float(value) for value in at)
            angles = kinematics.angles(x, y, z)
            if corrected:
                # Less what the links' own weight asks for: that is another test's.
                with_it, without = (
                    loaded(correction, leg, angles, STILL) for correction in (round_foot, pointed)
                )
                angles = vec3(np.array(angles) + np.array(with_it) - np.array(without))
            centres.append(kinematics.foot(*angles))
            turns.append((angles[0], angles[1] + angles[2]))
        centre, (roll, shank) = np.array(centres), np.array(turns).T
        # A ball that turns about +x goes on along -y, one that turns about the leg's own pitch axis,
        # which the roll has tilted, along +x.
        along = np.concatenate(([0.0], np.cumsum(np.diff(shank) * np.cos(0.5 * (roll[1:] + roll[:-1])))))
        rolled = radius * np.column_stack((along, roll[0] - roll))
        body = rolled - (centre[:, :2] - centre[0, :2])
        told = np.zeros_like(body)
        told[:, axis] = sweep[0] - sweep
        off = body - told
        worst[corrected] = float(np.abs(off - off.mean(axis=0)).max())
        if corrected:
            assert np.ptp(centre[:, 2]) < 0.003 * robot.stance.height_m
    assert worst[True] < 0.25 * worst[False]
    assert worst[False] > 2e-4


# ---- trailing and slack


def test_trailing_time_is_torque_over_speed_over_stiffness() -> None:
    """By hand: 2 N m over 8 rad/s is a line of 0.25 N m s; over 25 N m/rad 10 ms.  What was
    measured goes before it."""
    servo = Servo(name="s", speed_rad_s=8.0, torque_nm=2.0, rated_v=6.0, stiffness_nm_rad=25.0)
    for trail_s, expected in ((None, 0.01), (0.03, 0.03)):
        joints = [
            make_joint(str(n), replace(servo, trail_s=trail_s), n, middle_rad=0.0, travel_rad=2.0)
            for n in range(3)
        ]
        leg = replace(juniper().legs[0], joints=(joints[0], joints[1], joints[2]))
        correction = LegCorrection(leg, LegKinematics(leg), (0.0, 0.5, -1.0))
        assert correction.trail_s == pytest.approx((expected,) * 3)


@ROBOTS
def test_a_servo_that_trails_so_commanded_follows_its_path(robot: Robot) -> None:
    """A motor on its torque-speed line under a stiff position loop, integrated by scipy: it gives
    k (command - angle) - slope speed, and without load that is nothing.  On a path to and fro
    it stays within a tenth of what it would trail if told the path itself."""
    robot = plain(robot)
    correction = corrections(robot)[0]
    middle = np.array(neutral_rad(robot)[0])
    stiffness = np.array([joint.servo.stiffness_nm_rad for joint in robot.legs[0].joints])
    slope = np.array([joint.servo.torque_nm / joint.servo.speed_rad_s for joint in robot.legs[0].joints])
    if any(joint.servo.trail_s is not None for joint in robot.legs[0].joints):
        stiffness = slope / np.array(correction.trail_s)  # as measured
    pace = 2.0 * math.pi * 1.0
    size = 0.2

    def path(time_s: float) -> tuple[Array, Array]:
        return middle + size * math.sin(pace * time_s), np.full(3, size * pace * math.cos(pace * time_s))

    def trailing(*, lead: bool) -> float:
        def speed(time_s: float, angles: Array) -> Array:
            wanted, speeds = path(time_s)
            command = np.array(wanted)
            if lead:
                at, moving = vec3(wanted), vec3(speeds)
                here = correction.command(at, moving, foot_of(robot.legs[0], at), 0.0, UNLOADED)
                command += np.array(here) - np.array(loaded(correction, robot.legs[0], at, STILL))
            return np.asarray(stiffness * (command - angles) / slope)

        found = solve_ivp(speed, (0.0, 1.5), path(0.0)[0], t_eval=np.linspace(0.5, 1.5, 60), max_step=0.01)
        wanted = np.array([path(float(time))[0] for time in found.t]).T
        return float(np.abs(found.y - wanted).max())

    assert trailing(lead=True) < 0.1 * trailing(lead=False)


def test_half_dead_band_by_hand() -> None:
    """270 degrees over 2000 us, a dead band of 3 us: half of it is 0.2025 degrees."""
    joint = replace(
        juniper().joints[0],
        servo=replace(juniper().joints[0].servo, dead_band_us=3.0),
        pulse_map=((math.radians(-135.0), 500.0), (math.radians(135.0), 2500.0)),
    )
    assert math.degrees(half_dead_band_rad(joint)) == pytest.approx(0.2025, rel=1e-12)


def test_slack_is_crossed_towards_the_load() -> None:
    """A joint that surely bears a torque is commanded beyond its sag by half the dead band and half
    the backlash, against the torque; one that bears nothing is not."""
    robot = plain(anvil(), radius_m=0.0)
    leg = robot.legs[0]
    servo = replace(leg.joints[0].servo, backlash_rad=0.008)
    roll, hip, knee = (replace(joint, servo=servo) for joint in leg.joints)
    angles = neutral_rad(robot)[0]
    without, with_it = (
        LegCorrection(each, LegKinematics(each), angles)
        for each in (leg, replace(leg, joints=(roll, hip, knee)))
    )
    for force in ((0.0, 0.0, 300.0), (0.0, 0.0, -300.0)):
        torques = held_torques(robot, 0, angles, force)
        plain_command, command = (np.array(loaded(each, leg, angles, force)) for each in (without, with_it))
        sure = np.abs(torques) > 1.2  # ten times the friction taken, 3 % of 4 N m
        assert sure.sum() >= 2
        added = command - plain_command
        assert added[sure] == pytest.approx(0.004 * np.sign(np.array(torques)[sure]), rel=0.1)
        assert np.abs(added).max() <= 0.004
