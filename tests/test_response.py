"""What is asked truly happens: the response to the feet's motion, its inverse, and the odometry; m, rad.

Judge from outside: scipy's matrix logarithm, numpy's linear algebra.
"""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.linalg import logm

from hobnail.controller import Controller, Tick
from hobnail.motion.planar import exp_twist
from hobnail.response import AS_MADE, feet_twist, log_pose, true_twist
from hobnail.robot import Robot, Vec3, WalkResponse
from robots import examples, juniper

SLIPPERY = WalkResponse(ahead=(0.9, 0.05, -0.06), sideways=(-0.03, 0.82, 0.1), turn=1.15)
Array = NDArray[np.float64]


def responses() -> st.SearchStrategy[WalkResponse]:
    """Any that a calibration file may hold."""
    true, drift, veer = st.floats(0.7, 1.4), st.floats(-0.3, 0.3), st.floats(-0.69, 0.69)
    return st.builds(
        WalkResponse,
        ahead=st.tuples(true, drift, veer),
        sideways=st.tuples(drift, true, veer),
        turn=true,
    )


def as_matrix(response: WalkResponse) -> Array:
    return np.array([response.ahead, response.sideways, (0.0, 0.0, response.turn)]).T


def placed(pose: Vec3) -> Array:
    x, y, yaw = pose
    c, s = math.cos(yaw), math.sin(yaw)
    return np.array([[c, -s, x], [s, c, y], [0.0, 0.0, 1.0]])


TWISTS = st.tuples(st.floats(-2, 2), st.floats(-2, 2), st.floats(-3, 3))


@given(TWISTS)
@examples(25)
def test_the_logarithm_of_a_pose_is_scipys_and_undoes_the_exponential(twist: Vec3) -> None:
    pose = exp_twist(*twist, 1.0)
    assert log_pose(pose) == pytest.approx(twist, abs=1e-9)
    by_scipy = logm(placed(pose)).real
    assert log_pose(pose) == pytest.approx((by_scipy[0, 2], by_scipy[1, 2], by_scipy[1, 0]), abs=1e-6)


@given(responses(), TWISTS)
def test_it_is_the_linear_map_and_its_inverse(response: WalkResponse, twist: Vec3) -> None:
    matrix = as_matrix(response)
    assert true_twist(response, twist) == pytest.approx(matrix @ np.array(twist), abs=1e-12)
    assert feet_twist(response, twist) == pytest.approx(np.linalg.solve(matrix, np.array(twist)), abs=1e-9)


def walked(robot: Robot, commands: list[Vec3], ticks: int = 150) -> list[Tick]:
    controller = Controller(robot)
    told = []
    for command in commands:
        controller.walk(*command)
        told += [controller.tick(robot.period_s) for _ in range(ticks)]
    return told


def test_a_robot_that_goes_as_its_feet_do_pays_for_nothing() -> None:
    controller = Controller(juniper())
    assert juniper().walk == AS_MADE
    assert controller._odometry is None


def test_the_feet_make_what_truly_gives_the_command() -> None:
    """Tick for tick the same pulses as an untrimmed robot that is asked for the feet's motion."""
    robot = replace(juniper(), walk=SLIPPERY)
    commands: list[Vec3] = [(0.1, 0.0, 0.0), (0.05, -0.03, 0.2), (0.0, 0.0, -0.3)]
    trimmed = walked(robot, commands)
    plain = walked(juniper(), [feet_twist(SLIPPERY, command) for command in commands])
    assert [tick.pulses_us for tick in trimmed] == [tick.pulses_us for tick in plain]
    assert [tick.feet_m for tick in trimmed] == [tick.feet_m for tick in plain]


def test_held_long_enough_the_velocity_told_is_what_was_asked() -> None:
    robot = replace(juniper(), walk=SLIPPERY)
    (asked,) = commands = [(0.08, 0.03, -0.2)]
    assert walked(robot, commands, 300)[-1].velocity == pytest.approx(asked, abs=1e-9)


def test_the_pivot_is_that_of_the_true_motion() -> None:
    robot = replace(juniper(), walk=SLIPPERY)
    controller = Controller(robot)
    controller.walk(0.0, 0.0, 0.3, (0.0, 0.2))
    told = [controller.tick(robot.period_s) for _ in range(300)][-1]
    assert told.velocity == pytest.approx((0.06, 0.0, 0.3), abs=1e-9)


def test_the_envelope_bounds_the_motion_of_the_feet() -> None:
    robot = replace(juniper(), walk=replace(AS_MADE, ahead=(0.8, 0.0, 0.0)))
    told = walked(robot, [(robot.envelope.forward_m_s, 0.0, 0.0)], 400)[-1]
    assert told.velocity[0] == pytest.approx(0.8 * robot.envelope.forward_m_s, rel=1e-3)


@given(responses(), st.tuples(st.floats(-0.1, 0.1), st.floats(-0.05, 0.05), st.floats(-0.4, 0.4)))
@examples(3)
def test_the_odometry_tells_the_true_motion(response: WalkResponse, command: Vec3) -> None:
    """The walk of the feet, taken from an untrimmed robot, each tick's twist mapped and added up."""
    gait = replace(juniper().gaits[0], cycle_s=0.5, body_shift=0.0)  # 50 ticks, so that they recur
    still = replace(juniper(), gaits=(gait,))
    trimmed = walked(replace(still, walk=response), [command, (0.0, 0.0, 0.0)], 300)
    plain = walked(still, [feet_twist(response, command), (0.0, 0.0, 0.0)], 300)
    matrix, place = as_matrix(response), np.eye(3)
    for before, after in pairwise(plain):
        x, y, _ = np.linalg.solve(placed(before.pose), np.array([after.pose[0], after.pose[1], 1.0]))
        vx, vy, yaw_rate = matrix @ np.array(log_pose((x, y, after.pose[2] - before.pose[2])))
        place = place @ placed(exp_twist(vx, vy, yaw_rate, 1.0))
    assert placed(trimmed[-1].pose) == pytest.approx(place, abs=1e-4)


def test_ticks_that_recur_are_told_truly_too() -> None:
    """A trimmed robot whose cycle has come round goes on as one whose ticks are all worked out."""
    gait = replace(juniper().gaits[0], cycle_s=0.5)
    robot = replace(juniper(), walk=SLIPPERY, gaits=(gait,))
    recurring, worked_out = Controller(robot), Controller(robot)
    turning = 0
    for each in (recurring, worked_out):
        each.walk(0.08, 0.0, 0.1)
    for _ in range(600):
        worked_out._take_over()
        a, b = recurring.tick(robot.period_s), worked_out.tick(robot.period_s)
        assert a.pose == pytest.approx(b.pose, abs=1e-7)
        assert a.velocity == pytest.approx(b.velocity, abs=1e-9)
        turning += recurring._recurrence.turning
    assert turning > 200


def test_sway_and_posture_lead_nowhere() -> None:
    """The body moved about over standing feet is told as far as it is moved, whatever the floor."""
    robot = replace(juniper(), walk=SLIPPERY)
    controller, plain = Controller(robot), Controller(juniper())
    for each in (controller, plain):
        each.posture(yaw_rad=0.1, lean_m=(0.01, -0.01))
    for _ in range(200):
        told, untrimmed = controller.tick(robot.period_s), plain.tick(robot.period_s)
        assert told.pose == pytest.approx(untrimmed.pose, abs=1e-12)
