"""Rocking on springy legs: matrices against energy and the pendulum, then what is known of resonance."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from hobnail.motion.balance import GRAVITY_M_S2, centre_of_mass, neutral_feet
from hobnail.motion.leg import LegKinematics
from hobnail.motion.rocking import SpringyBody, burden, rocking_rad, rocks
from hobnail.robot import Robot
from robots import anvil, bramble, fixed_robots, juniper, stilt

Array = NDArray[np.float64]
ROBOTS = pytest.mark.parametrize("robot", fixed_robots(), ids=lambda robot: robot.name)
FAST = 1e6  # rad/s: nothing is slowed


def with_servos(robot: Robot, stiffness: float = 1.0, speed: float = 1.0) -> Robot:
    """All servos that many times as stiff and as fast; a fast servo is damped less."""
    legs = []
    for leg in robot.legs:
        a, b, c = (
            replace(
                joint,
                servo=replace(
                    joint.servo,
                    stiffness_nm_rad=stiffness
                    * (joint.servo.stiffness_nm_rad or 10.0 * joint.servo.torque_nm),
                    speed_rad_s=speed * joint.servo.speed_rad_s,
                ),
            )
            for joint in leg.joints
        )
        legs.append(replace(leg, joints=(a, b, c)))
    return replace(robot, legs=tuple(legs))


def turned(angles: Array) -> Array:
    """Small rotation as a matrix, to second order."""
    x, y, z = angles
    cross = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    turn: Array = np.eye(3) + cross + 0.5 * cross @ cross
    return turn


@ROBOTS
def test_springs_hold_what_bending_the_servos_takes(robot: Robot) -> None:
    """A body moved a little over feet that stay: the energy in the springs, by the matrices, is that of
    all servos turned off their targets, by the legs' inverse kinematics."""
    body = SpringyBody(robot, FAST)
    feet = neutral_feet(robot)
    height = robot.stance.height_m
    legs = [LegKinematics(leg) for leg in robot.legs]

    def joints(move: Array) -> Array:
        back = turned(move[3:]).T
        found: list[float] = []
        for leg, kinematics, foot in zip(robot.legs, legs, feet, strict=True):
            at = np.array([*foot, -height])  # bottom of the foot
            raised = np.array([0.0, 0.0, leg.foot_radius_m])
            place = back @ (at - centre - move[:3]) + centre + raised - np.array(leg.hip_m)
            found += kinematics.angles(*place.tolist())
        return np.array(found)

    zero = np.zeros(6)
    centre = np.zeros(3)
    flat = joints(zero).reshape(-1, 3)
    centre = np.array(centre_of_mass(robot, flat.tolist()))
    stiffness = np.array(
        [joint.servo.stiffness_nm_rad or 10.0 * joint.servo.torque_nm for joint in robot.joints]
    )
    random = np.random.default_rng(1)
    for _ in range(5):
        move = 1e-5 * random.normal(size=6)
        bent = (joints(move) - joints(-move)) / 2.0
        energy = 0.5 * float(stiffness @ bent**2)
        # Of the forces that hold, times how the feet move against the body.
        held = move @ body.pull
        ways = np.concatenate(
            [move[:3] + np.cross(move[3:], np.array([*foot, -height]) - centre) for foot in feet]
        )
        assert 0.5 * float(held @ ways) == pytest.approx(energy, rel=2e-2)


@pytest.mark.parametrize("robot", [juniper(), stilt(), anvil()], ids=lambda robot: robot.name)
def test_on_two_stiff_legs_it_falls_like_a_pendulum(robot: Robot) -> None:
    """About the line of the feet: a rate of sqrt(m g h / (I + m h^2)), I about that line through the
    centre of mass (the compound pendulum of mechanics), less than the point mass's sqrt(g/h)."""
    body = SpringyBody(with_servos(robot, 1e4, 1e3), 1e9)
    pair = [0, 1, 2, 9, 10, 11]  # left front and right hind
    springs = body.pull[:, pair] @ body.push[pair]
    rates = np.linalg.eigvals(body.tip - springs)
    rate2 = float(max(rates.real))
    feet = neutral_feet(robot)
    angles = [
        LegKinematics(leg).angles(
            foot[0] - leg.hip_m[0],
            foot[1] - leg.hip_m[1],
            leg.foot_radius_m - robot.stance.height_m - leg.hip_m[2],
        )
        for leg, foot in zip(robot.legs, feet, strict=True)
    ]
    high = robot.stance.height_m + centre_of_mass(robot, angles)[2]
    line = np.array([*(np.array(feet[0]) - np.array(feet[3])), 0.0])
    line /= np.linalg.norm(line)
    # The matrices' own inertia, from what a moment at all feet does.
    point = GRAVITY_M_S2 / high
    assert 0.6 * point < rate2 < point
    inertia_share = point / rate2 - 1.0
    box = robot.body
    least = box.mass_kg / 12.0 * min(box.size_m[1], box.size_m[2]) ** 2 / (robot.mass_kg * high**2)
    assert inertia_share > least


def test_a_tilt_dies_away_where_enough_feet_are_always_down() -> None:
    robot = juniper()
    crawl = replace(robot.gait("trot"), duty=0.98)
    assert max(rocking_rad(robot, crawl, (0.4, 0.5, 0.6))) < math.radians(0.3)


def test_soft_servos_rock_where_stiff_ones_do_not() -> None:
    robot, trot = juniper(), juniper().gait("trot")
    (stiff,) = rocking_rad(robot, trot, (0.5,))
    (soft,) = rocking_rad(with_servos(robot, 0.4), trot, (0.5,))
    assert soft > 2.0 * stiff


def test_stiffer_servos_leave_shorter_cycles() -> None:
    """The bands in which it rocks are at shorter cycles."""
    trot = juniper().gait("trot")
    times = tuple(np.geomspace(0.2, 0.8, 12).tolist())
    bands = [np.array(rocking_rad(with_servos(juniper(), k), trot, times)) for k in (1.0, 2.0)]
    calm = [times[int(np.argmax(band < math.radians(0.3)))] for band in bands]
    assert calm[1] < calm[0]


def test_what_is_found_is_found_again_bit_for_bit() -> None:
    robot, trot = juniper(), juniper().gait("trot")
    first = rocking_rad.__wrapped__(robot, trot, (0.3, 0.5))
    assert rocking_rad.__wrapped__(robot, trot, (0.3, 0.5)) == first


def test_each_cycle_time_is_followed_by_itself() -> None:
    """The number of steps is that of the longest; which others are asked for makes little difference."""
    robot, trot = juniper(), juniper().gait("trot")
    many = rocking_rad(robot, trot, (0.42, 0.5, 0.58))
    for time, both in zip((0.42, 0.5, 0.58), many, strict=True):
        assert rocking_rad(robot, trot, (time,))[0] == pytest.approx(both, rel=0.2, abs=2e-3)


def test_only_gaits_that_sway_on_two_feet_rock() -> None:
    trot = juniper().gait("trot")
    assert rocks(trot)
    assert not rocks(replace(trot, body_shift=0.0))
    assert not rocks(juniper().gait("crawl"))
    assert not rocks(bramble().gait("tripod"))


def test_short_cycles_and_the_neighbours_of_rocking_ones_weigh() -> None:
    robot, trot = juniper(), juniper().gait("trot")
    times = tuple(np.geomspace(0.25, 0.8, 12).tolist())
    heaviness, rocking = burden(robot, trot, times), np.array(rocking_rad(robot, trot, times))
    worst = int(np.argmax(rocking))
    calm = int(np.argmin(rocking))
    assert heaviness[worst] > heaviness[calm]
    for near in (worst - 1, worst + 1):
        if 0 <= near < len(times):
            assert heaviness[near] >= 0.5 * rocking[worst] / math.radians(0.6)


@ROBOTS
def test_any_robot_is_told_a_finite_tilt(robot: Robot) -> None:
    for gait in robot.gaits:
        assert np.isfinite(rocking_rad(robot, gait, (0.2, 0.5, 1.5))).all()
