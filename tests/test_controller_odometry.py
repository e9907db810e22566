"""Where the robot thinks it is, against closed forms and scipy's matrix exponential; m, rad, s.

A walk's shift over its supports goes to and fro in each cycle and is part of
the pose: paths are compared where the robot stands, or a whole cycle apart.
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
from scipy.linalg import expm

from hobnail.controller import Tick
from hobnail.motion.plan import joint_speeds_rad_s
from hobnail.robot import Gait, Robot, Vec3
from robots import anvil, bramble, examples, juniper, stilt
from walks import Walk, record

ROBOTS = pytest.mark.parametrize(
    "robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name
)


def moved(twist: Vec3, time_s: float) -> NDArray[np.float64]:
    """A held twist as a matrix, by scipy."""
    vx, vy, yaw_rate = twist
    return np.asarray(expm(np.array([[0.0, -yaw_rate, vx], [yaw_rate, 0.0, vy], [0.0, 0.0, 0.0]]) * time_s))


def matrix(pose: Vec3) -> NDArray[np.float64]:
    """A pose as a matrix."""
    x, y, yaw = pose
    c, s = math.cos(yaw), math.sin(yaw)
    return np.array([[c, -s, x], [s, c, y], [0.0, 0.0, 1.0]])


def gentle(robot: Robot) -> Robot:
    """The robot with one timed gait: the same cycle for every command, slow enough for any
    servo, the body not shifting over its supports."""
    gait = robot.gaits[0]
    cycle_s = round(60.0 * gait.cycle_range_s[1]) * 0.02  # of whole ticks, all periods being 10 or 20 ms
    return replace(robot, gaits=(replace(gait, cycle_s=cycle_s, lift_m=0.5 * gait.lift_m, body_shift=0.0),))


def walk_and_stop(robot: Robot, shares: Vec3, time_s: float, pivot: tuple[float, float] = (0.0, 0.0)) -> Walk:
    """Walk for a time, then stand until settled."""
    walk = Walk(robot).walk(*shares, pivot)
    walk.go(round(time_s / walk.dt_s))
    walk.controller.stand()
    return walk.until_settled()


def in_units(robot: Robot, shares: Vec3) -> Vec3:
    """The twist that is these shares of the envelope."""
    limits = robot.envelope
    return shares[0] * limits.forward_m_s, shares[1] * limits.sideways_m_s, shares[2] * limits.turn_rad_s


def walked_s(walk: Walk, twist: Vec3) -> float:
    """How long the twist would have had to be held for what was really done: by the
    velocities told, which change linearly enough within a tick."""
    largest = max(range(3), key=lambda axis: abs(twist[axis]))
    total, before = 0.0, 0.0
    for tick in walk.ticks:
        now = tick.velocity[largest] / tick.slowdown
        total += 0.5 * (before + now) * walk.dt_s * tick.slowdown
        before = now
    return total / twist[largest]


COMMANDS = pytest.mark.parametrize(
    "shares",
    [
        (0.3, 0.0, 0.0),
        (-0.3, 0.0, 0.0),
        (0.0, 0.3, 0.0),
        (0.0, 0.0, 0.4),
        (0.3, 0.0, 0.3),
        (0.2, -0.2, -0.2),
    ],
    ids=["straight", "back", "sideways", "spin", "arc", "all at once"],
)


@ROBOTS
@COMMANDS
def test_a_walk_ends_where_the_commanded_twist_leads(robot: Robot, shares: Vec3) -> None:
    """On the very curve of the twist, by scipy: a command starts, stops and is held back at the
    start in all its components together."""
    walk = walk_and_stop(robot, shares, 4.0)
    twist = in_units(robot, shares)
    time_s = walked_s(walk, twist)
    assert 3.0 < time_s < 4.2  # starting takes more of it than stopping adds
    assert matrix(walk.ticks[-1].pose) == pytest.approx(moved(twist, time_s), abs=1e-9)


@ROBOTS
def test_far_pivot_stays_where_it_is(robot: Robot) -> None:
    """Turning about a point 1.5 m to the left: at the end, that point is where it was."""
    pivot = (0.0, 1.5)
    yaw_rate = 0.3 * robot.envelope.forward_m_s / pivot[1]
    walk = Walk(robot)
    walk.controller.walk(0.0, 0.0, yaw_rate, pivot)
    walk.go(round(6.0 / walk.dt_s))
    walk.controller.stand()
    end = walk.until_settled().ticks[-1].pose
    assert (matrix(end) @ np.array([*pivot, 1.0]))[:2] == pytest.approx(pivot, abs=1e-9)
    assert 5.0 * yaw_rate < end[2] <= 6.0 * yaw_rate * (1.0 + 1e-9)


def test_velocity_at_the_pivot_means_that_point_of_the_body() -> None:
    """By hand: a point 0.2 m ahead that goes left at 0.06 m/s while the body turns at 0.3 rad/s
    goes round the body's origin, which stays."""
    walk = Walk(juniper())
    walk.controller.walk(0.0, 0.06, 0.3, (0.2, 0.0))
    walk.go(300)
    walk.controller.stand()
    end = walk.until_settled().ticks[-1].pose
    assert end[:2] == pytest.approx((0.0, 0.0), abs=1e-9)
    assert 0.7 < end[2] < 0.9


def cycles_apart(walk: Walk, gait: Gait) -> tuple[Tick, Tick, float]:
    """Two ticks of the steady part that are whole cycles apart, and the time between."""
    assert gait.cycle_s is not None
    cycle = round(gait.cycle_s / walk.dt_s)
    assert cycle * walk.dt_s == pytest.approx(gait.cycle_s, abs=1e-9)
    return walk.ticks[-1 - 2 * cycle], walk.ticks[-1], 2 * cycle * walk.dt_s


@ROBOTS
@examples(8)
@given(shares=st.tuples(*[st.floats(-0.35, 0.35)] * 3))
def test_steady_walk_follows_the_twist(robot: Robot, shares: Vec3) -> None:
    """Over whole cycles the pose goes on by exp(twist time), by scipy, to a nanometre."""
    robot = gentle(robot)
    walk = Walk(robot).walk(*shares)
    walk.go(round(14.0 / walk.dt_s))
    start, end, time_s = cycles_apart(walk, robot.gaits[0])
    assert min(tick.slowdown for tick in walk.ticks) == 1.0
    twist = walk.ticks[-1].velocity
    assert twist == pytest.approx(in_units(robot, shares), abs=1.1e-9)
    gone = np.linalg.inv(matrix(start.pose)) @ matrix(end.pose)
    assert gone == pytest.approx(moved(twist, time_s), abs=1e-9)


@ROBOTS
@COMMANDS
def test_footprints_follow_the_twist(robot: Robot, shares: Vec3) -> None:
    """Each foot's next place is its last one moved as the twist moves in a cycle; back is
    forward reversed in this as well."""
    robot = gentle(robot)
    cycle_s = robot.gaits[0].cycle_s
    assert cycle_s is not None
    for sign in (1.0, -1.0):
        twist = in_units(robot, (sign * shares[0], sign * shares[1], sign * shares[2]))
        walk = Walk(robot)
        walk.controller.walk(*twist)
        found = record(walk.go(round(6.0 * cycle_s / walk.dt_s)))
        steady = found.time_s > 2.5 * cycle_s
        for leg in range(len(robot.legs)):
            places = found.on_ground_m[found.stance[:, leg] & steady, leg, :2]
            prints = places[np.append(True, np.linalg.norm(np.diff(places, axis=0), axis=1) > 1e-6)]
            assert len(prints) >= 3
            for old, new in pairwise(prints):
                # The twist is that of the body: about where the body is, not the origin.  What
                # does not depend on that is the prints' turn and, seen from a print, the next.
                assert np.linalg.norm(new - old) > 1e-3
            steps = np.diff(prints, axis=0)
            turn = moved(twist, cycle_s)[:2, :2]
            for before, after in pairwise(steps):
                assert after == pytest.approx(turn @ before, abs=1e-7)
            if twist[2] == 0.0:
                assert steps[0] == pytest.approx(np.array(twist[:2]) * cycle_s, abs=1e-7)


@ROBOTS
def test_straight_back_is_straight_forth_mirrored_tick_by_tick(robot: Robot) -> None:
    robot = gentle(robot)
    forth, back = (record(walk_and_stop(robot, (sign * 0.3, 0.0, 0.0), 3.0)) for sign in (1.0, -1.0))
    assert (forth.stance == back.stance).all()
    feet = record(Walk(robot).go(1)).on_ground_m[0]
    there, here = forth.on_ground_m - feet, back.on_ground_m - feet
    assert there[:, :, 0] == pytest.approx(-here[:, :, 0], abs=1e-7)
    assert there[:, :, 1:] == pytest.approx(here[:, :, 1:], abs=1e-7)


@ROBOTS
def test_what_is_too_much_is_scaled_down_as_a_whole(robot: Robot) -> None:
    """A command three times beyond the envelope: same direction, on the ellipsoid or within."""
    walk = Walk(robot).walk(3.0, 1.5, 1.5).go(round(4.0 / robot.period_s))
    found = np.array(walk.ticks[-1].velocity) / walk.ticks[-1].slowdown
    envelope = robot.envelope
    shares = found / np.array([envelope.forward_m_s, envelope.sideways_m_s, envelope.turn_rad_s])
    assert np.linalg.norm(shares) <= 1.0 + 1e-9
    assert np.linalg.norm(shares) > 0.2
    assert shares / shares[0] == pytest.approx([1.0, 0.5, 0.5], rel=1e-9)


@ROBOTS
def test_odometry_counts_what_was_done_and_not_what_was_asked(robot: Robot) -> None:
    """Slowed by a flat battery in mid-walk, the robot gets less far, and knows it."""
    twist = in_units(robot, (0.8, 0.0, 0.0))
    walk = Walk(robot)
    walk.controller.walk(*twist)
    walk.go(50)
    walk.controller.supply_v = 0.4 * robot.supply.nominal_v
    walk.go(round(6.0 / walk.dt_s))
    walk.controller.stand()
    walk.until_settled()
    assert min(tick.slowdown for tick in walk.ticks) < 0.9
    time_s = walked_s(walk, twist)
    assert walk.ticks[-1].pose == pytest.approx((twist[0] * time_s, 0.0, 0.0), abs=1e-9)
    assert time_s < 6.0


@ROBOTS
@pytest.mark.parametrize("supply", [1.0, 0.6])
def test_it_slows_no_more_than_a_joint_needs(robot: Robot, supply: float) -> None:
    """In every slowed tick of every gait some joint goes nearly as fast as it may: a tick that is
    cut shorter than that jolts the robot."""
    slowed = 0
    for gait in robot.gaits:
        walk = Walk(robot)
        walk.controller.gait(gait.name)
        walk.walk(0.6, 0.5, 0.6).go(50)
        walk.controller.supply_v = supply * robot.supply.nominal_v
        walk.go(300)
        found = record(walk)
        speeds = np.array(joint_speeds_rad_s(robot, walk.controller.supply_v)) * walk.dt_s
        shares = (np.abs(np.diff(found.joints_rad, axis=0)) / speeds).max(axis=(1, 2))[50:]
        slow = found.slowdown[51:] < 1.0
        slowed += slow.sum()
        assert (shares[slow] > 0.85).all()
    assert slowed or supply == 1.0
