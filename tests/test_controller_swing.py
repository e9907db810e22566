"""Feet in the air: continuous up to acceleration, and on the same paths when slowed; m, s."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray

from hobnail.robot import Keyframe, Robot
from robots import anvil, bramble, juniper, stilt
from walks import Record, Walk, record, swing_curves

ROBOTS = pytest.mark.parametrize(
    "robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name
)
Array = NDArray[np.float64]


def slow(robot: Robot, gait: int = 0) -> Robot:
    """The robot with one of its gaits, timed slow."""
    chosen = robot.gaits[gait]
    cycle_s = round(75.0 * chosen.cycle_range_s[1]) * 0.02
    return replace(robot, gaits=(replace(chosen, cycle_s=cycle_s),))


def unslowed(robot: Robot, dt_s: float) -> Walk:
    """A walk whose servos are never too slow: their supply is twenty times too strong."""
    walk = Walk(robot, dt_s=dt_s)
    walk.controller.supply_v = 20.0 * robot.supply.nominal_v
    return walk


# ---- continuity, by refinement


def gentle_changes(walk: Walk) -> None:
    """Start, turn, change of mind in mid-step, reverse and stop, each after a time in seconds."""
    for shares, time_s in (
        ((0.3, 0.0, 0.0), 1.0),
        ((0.3, 0.0, 0.2), 0.6),
        ((0.1, 0.3, 0.0), 0.5),
        ((-0.2, 0.0, -0.2), 1.2),
    ):
        walk.walk(*shares).go(round(time_s / walk.dt_s))
    walk.controller.stand()
    walk.go(round(2.0 / walk.dt_s))


def greatest_jumps(found: Record) -> list[float]:
    """Greatest change from one tick to the next of the feet's place over the ground and its
    first two time derivatives, by differences."""
    dt_s = float(found.dt_s[0])
    rows = found.on_ground_m
    jumps = []
    for _ in range(3):
        steps = np.diff(rows, axis=0)
        jumps.append(float(np.abs(steps).max()))
        rows = steps / dt_s
    return jumps


@ROBOTS
def test_position_velocity_and_acceleration_are_continuous(robot: Robot) -> None:
    """Through lift-offs, re-aims, late changes and landings: with ticks of half the length the
    greatest jumps of all three are about half as great, which no real step would be."""
    robot = slow(robot)
    jumps = []
    for dt_s in (0.002, 0.001, 0.0005):
        walk = unslowed(robot, dt_s)
        gentle_changes(walk)
        assert min(tick.slowdown for tick in walk.ticks) == 1.0
        found = record(walk)
        assert not found.stance.all()
        jumps.append(greatest_jumps(found))
    for coarse, fine in pairwise(jumps):
        for before, after in zip(coarse, fine, strict=True):
            assert after <= 0.65 * before


@ROBOTS
def test_feet_leave_and_meet_the_ground_at_rest(robot: Robot) -> None:
    """No scuffing: beside lift-off and touch-down the speed over the ground goes to nothing as
    the square of the time, acceleration and velocity being zero there."""
    walk = Walk(slow(robot), dt_s=0.001)
    walk.walk(0.3, 0.1, 0.1).go(round(3.0 * (walk.robot.gaits[0].cycle_s or 0.0) / 0.001))
    found = record(walk)
    count = 0
    for leg in range(len(robot.legs)):
        for _, places in swing_curves(found, leg):
            speeds = np.linalg.norm(np.diff(places, axis=0), axis=1) / 0.001
            for ends in (speeds[:6], speeds[::-1][:6]):
                assert ends[0] < 0.02 * speeds.max()
                assert ends[5] < 0.2 * speeds.max()
            count += 1
    assert count >= len(robot.legs)


# ---- the same paths, only slower


def distance_to(curve: Array, point: Array) -> float:
    """From a point to a curve given by many points, straight between them."""
    start, way = curve[:-1], np.diff(curve, axis=0)
    length2 = np.maximum((way * way).sum(axis=1), 1e-30)
    share = np.clip(((point - start) * way).sum(axis=1) / length2, 0.0, 1.0)
    return float(np.linalg.norm(start + share[:, None] * way - point, axis=1).min())


@ROBOTS
@pytest.mark.parametrize("gait", [0, 1])
@pytest.mark.parametrize("shares", [(0.6, 0.0, 0.0), (0.3, 0.2, 0.4)], ids=["straight", "all at once"])
def test_slowed_feet_are_on_the_same_paths(
    robot: Robot, gait: int, shares: tuple[float, float, float]
) -> None:
    """The battery gives in during a steady walk: every place of every swing lies on the path of
    the walk that goes on unslowed, in space, and is reached at the same of the robot's own time.
    """
    chosen = robot.gaits[gait]
    robot = replace(robot, gaits=(replace(chosen, cycle_s=round(60.0 * chosen.cycle_range_s[0]) * 0.02),))
    cycle_s = robot.gaits[0].cycle_s
    assert cycle_s is not None
    free, held = (unslowed(robot, robot.period_s) for _ in range(2))
    for walk in (free, held):
        walk.walk(*shares).go(round(8.0 * cycle_s / walk.dt_s))
    free.dt_s = 0.001  # a fine curve to compare with
    free.go(round(2.3 * cycle_s / 0.001))
    held.controller.supply_v = 0.3 * robot.supply.nominal_v
    start = len(held.ticks)
    while sum(tick.slowdown for tick in held.ticks[start:]) * held.dt_s < 1.9 * cycle_s:
        held.go(5)
    slowest = min(tick.slowdown for tick in held.ticks)
    assert slowest < 0.8
    reference, found = record(free), record(held)
    compared = 0
    for row in range(start, len(held.ticks)):
        first = np.searchsorted(reference.time_s, found.time_s[row])
        for leg in range(len(robot.legs)):
            if not found.stance[row, leg]:
                curve = reference.on_ground_m[first - 40 : first + 40, leg]
                assert distance_to(curve, found.on_ground_m[row, leg]) < 2e-5
                near = reference.on_ground_m[first - 1 : first + 1, leg]
                assert np.linalg.norm(near - found.on_ground_m[row, leg], axis=1).min() < 2e-3
                compared += 1
    assert compared > 50


# ---- a user's own keyframes


HIGH_STEP = (
    Keyframe(time=0.0, travel=0.0, lift=0.0),
    Keyframe(time=0.2, travel=0.0, lift=0.8),
    Keyframe(time=0.5, travel=0.3, lift=1.0),
    Keyframe(time=0.8, travel=1.0, lift=0.7),
    Keyframe(time=1.0, travel=1.0, lift=0.0),
)


@ROBOTS
def test_own_keyframes_drive_the_swing(robot: Robot) -> None:
    """In steady walking each foot is at each keyframe's travel and lift at its time."""
    robot = slow(robot)
    gait = replace(robot.gaits[0], swing=HIGH_STEP)
    robot = replace(robot, gaits=(gait,))
    assert gait.cycle_s is not None
    walk = Walk(robot, dt_s=0.002)
    walk.walk(0.3, 0.0, 0.0).go(round(4.5 * gait.cycle_s / 0.002))
    found = record(walk)
    swing_s = (1.0 - gait.duty) * gait.cycle_s
    radius = [leg.foot_radius_m for leg in robot.legs]
    compared = 0
    for leg in range(len(robot.legs)):
        for times, places in swing_curves(found, leg)[-1:]:
            start, end = places[0], places[-1]
            for frame in HIGH_STEP:
                at = times[0] + frame.time * swing_s
                here = np.array([np.interp(at, times, places[:, axis]) for axis in range(3)])
                travel = np.dot((here - start)[:2], (end - start)[:2]) / np.dot(
                    (end - start)[:2], (end - start)[:2]
                )
                assert travel == pytest.approx(frame.travel, abs=0.03)
                assert (here[2] - radius[leg]) / gait.lift_m == pytest.approx(frame.lift, abs=0.03)
                compared += 1
    assert compared == len(HIGH_STEP) * len(robot.legs)


@ROBOTS
def test_a_re_aimed_foot_lands_where_the_body_will_need_it(robot: Robot) -> None:
    """Half a stance ahead under the new twist, though it left the ground under another: the
    mid-stance places of Raibert (1986; memory), v T / 2 ahead of neutral at touch-down."""
    robot = slow(robot)
    robot = replace(robot, gaits=(replace(robot.gaits[0], body_shift=0.0),))
    gait = robot.gaits[0]
    assert gait.cycle_s is not None
    neutral = record(Walk(robot).go(1)).feet_m[0, :, :2]
    walk = Walk(robot, dt_s=0.001)
    walk.walk(0.2, 0.0, 0.0).go(round(4.0 * gait.cycle_s / 0.001))
    # A new command at a lift-off: the foot has the whole swing to be led elsewhere.
    while not (walk.ticks[-2].stance[0] and not walk.ticks[-1].stance[0]):
        walk.go(1)
    walk.walk(0.25, 0.1, 0.0)
    while not walk.ticks[-1].stance[0]:
        walk.go(1)
    vx, vy, _ = walk.ticks[-1].velocity
    assert vx == pytest.approx(0.25 * robot.envelope.forward_m_s)
    feet = record(walk).feet_m[-1, 0, :2]
    half_stance_s = 0.5 * gait.duty * gait.cycle_s
    assert feet == pytest.approx(neutral[0] + np.array([vx, vy]) * half_stance_s, abs=2e-4)


@ROBOTS
@pytest.mark.parametrize("shares", [(0.3, 0.0, 0.0), (-0.3, 0.2, 0.0)], ids=["straight", "slanting"])
def test_a_foot_stands_as_long_ahead_of_neutral_as_behind(
    robot: Robot, shares: tuple[float, float, float]
) -> None:
    """v T / 2 ahead at touch-down (Raibert 1986; memory), at the robot's own tick as well: all
    events fall on ticks here, so the foot is there to rounding."""
    cycle_s = 100 * robot.period_s
    robot = replace(
        robot, gaits=(replace(robot.gaits[0], duty=0.6, cycle_s=cycle_s, body_shift=0.0, lift_m=0.01),)
    )
    neutral = record(Walk(robot).go(1)).feet_m[0, :, :2]
    walk = unslowed(robot, robot.period_s)
    walk.walk(*shares).go(1600)
    found = record(walk)
    velocity = np.array(walk.ticks[-1].velocity[:2])
    for leg in range(len(robot.legs)):
        down = found.stance[-200:, leg]
        (landed,) = np.nonzero(down[1:] & ~down[:-1])
        # The tick at the touch-down itself may count as before or after it.
        at = found.feet_m[-200 + landed[0] : -198 + landed[0], leg, :2] - neutral[leg]
        off = np.linalg.norm(at - 0.3 * cycle_s * velocity, axis=1)
        assert off.min() < 1e-6
