"""The body's shift against the inverted pendulum, by differences, Fourier series and scipy; m, s."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from hobnail.controller import Controller
from hobnail.motion.balance import neutral_feet
from hobnail.motion.sway import HARMONICS, BodyShift, Inertia, PeriodicSway
from hobnail.robot import Gait, Robot, Vec2, Vec3
from pinocchio_judge import RobotJudge
from robots import anvil, examples, fixed_robots, juniper, made_up, stilt

Array = NDArray[np.float64]
GRAVITY_M_S2 = 9.81
SAMPLES = 2000  # of a cycle
ROBOTS = pytest.mark.parametrize("robot", fixed_robots(), ids=lambda robot: robot.name)
Pace = tuple[float, float, float, float]  # vx, vy, yaw rate, cycles a second


def light(height_m: float) -> Inertia:
    """A robot whose legs weigh nothing."""
    return Inertia(1.0, height_m)


def carrying(since: float, duty: float) -> float:
    """How much a foot carries: nothing in the air, and 10 u^3 - 15 u^4 + 6 u^5 of it (Flash & Hogan
    1985) over the time in which both pairs of a trot are down, 5 to 10 % of the cycle."""
    ramp = min(max(duty - 0.5, 0.05), 0.1)
    u = min(max(min(since, duty - since) / ramp, 0.0), 1.0)
    return 10.0 * u**3 - 15.0 * u**4 + 6.0 * u**5


def centroids(feet: Sequence[Vec2], gait: Gait, pace: Pace) -> Array:
    """Centroid of the feet over a cycle, each as much as it carries and sweeping back under the
    body, to first order in the turn, through its neutral place at mid-stance."""
    vx, vy, yaw_rate, rate_hz = pace
    rows = []
    for index in range(SAMPLES):
        clock = (index + 0.5) / SAMPLES
        places, loads = [], []
        for (x, y), phase in zip(feet, gait.phases, strict=True):
            since = (clock - phase) % 1.0
            ahead_s = (0.5 * gait.duty - since) / rate_hz
            places.append((x + ahead_s * (vx - yaw_rate * y), y + ahead_s * (vy + yaw_rate * x)))
            loads.append(carrying(since, gait.duty))
        rows.append(np.average(places, axis=0, weights=loads))
    return np.array(rows)


def truncated(values: Array) -> Array:
    """The Fourier series up to the harmonics used, at the samples."""
    series = np.fft.rfft(values, axis=0)
    series[HARMONICS + 1 :] = 0.0
    return np.fft.irfft(series, n=SAMPLES, axis=0)


def shifts(sway: PeriodicSway, pace: Pace) -> tuple[Array, Array]:
    """Shift and the acceleration told, at the samples."""
    rows = np.array([sway.at((index + 0.5) / SAMPLES, pace) for index in range(SAMPLES)])
    return rows[:, :2], rows[:, 2:]


paces = st.tuples(st.floats(-0.3, 0.3), st.floats(-0.2, 0.2), st.floats(-1.0, 1.0), st.floats(0.2, 2.5))


@examples(15)
@given(robot=st.sampled_from(fixed_robots()) | made_up(), pace=paces, share=st.floats(0.1, 1.0))
def test_zero_moment_point_is_the_centroid_of_the_feet_that_carry(
    robot: Robot, pace: Pace, share: float
) -> None:
    """p = x - (z/g) x'' (cart on a table; memory), x'' by differences: the same as the truncated
    Fourier series of the centroid, less its mean with the robot on the spot, where the
    neutral stance has it already."""
    feet = neutral_feet(robot)
    height = robot.stance.height_m
    for gait in robot.gaits:
        gait = replace(gait, body_shift=share)
        x, _ = shifts(PeriodicSway(feet, gait, light(height)), pace)
        step_s = 1.0 / (SAMPLES * pace[3])
        bend = (np.roll(x, 1, axis=0) - 2.0 * x + np.roll(x, -1, axis=0)) / step_s**2
        wanted = truncated(centroids(feet, gait, pace))
        wanted -= centroids(feet, gait, (0.0, 0.0, 0.0, pace[3])).mean(axis=0)
        # The judge samples jumps of the centroid; the exact integrals do not.
        slack = 4e-4 + 4e-3 * float(np.abs(wanted).max())
        assert x - height / GRAVITY_M_S2 * bend == pytest.approx(share * wanted, abs=slack)


@examples(10)
@given(robot=st.sampled_from(fixed_robots()), pace=paces)
def test_acceleration_is_the_second_derivative(robot: Robot, pace: Pace) -> None:
    feet = neutral_feet(robot)
    for gait in robot.gaits:
        x, acceleration = shifts(
            PeriodicSway(feet, replace(gait, body_shift=1.0), light(robot.stance.height_m)), pace
        )
        step_s = 1.0 / (SAMPLES * pace[3])
        bend = (np.roll(x, 1, axis=0) - 2.0 * x + np.roll(x, -1, axis=0)) / step_s**2
        assert acceleration == pytest.approx(bend, abs=1e-3 + 1e-4 * np.abs(bend).max())


@pytest.mark.parametrize(
    "shares", [(0.5, 0.0, 0.0), (0.0, 0.5, 0.0), (0.35, 0.35, 0.0), (0.0, 0.0, 0.5)], ids=str
)
@pytest.mark.parametrize("robot", [juniper(), anvil()], ids=lambda robot: robot.name)
def test_the_whole_robot_balances_between_the_two_feet_of_a_trot(robot: Robot, shares: Vec3) -> None:
    """The walk's own angles and pose, differentiated, and what pinocchio says the ground must do for
    them, swinging legs and all: the zero-moment point is near the middle between the feet."""
    controller = Controller(robot)
    controller.gait("trot")
    envelope = robot.envelope
    controller.walk(
        shares[0] * envelope.forward_m_s, shares[1] * envelope.sideways_m_s, shares[2] * envelope.turn_rad_s
    )
    dt_s = 0.002
    ticks = [controller.tick(dt_s) for _ in range(round(3.0 / dt_s))][-round(1.0 / dt_s) :]
    judge = RobotJudge(robot)
    states = [judge.configuration(tick.joints_rad, tick.pose, tick.height_m) for tick in ticks]
    speeds = [judge.difference(a, b) / dt_s for a, b in pairwise(states)]
    off = []
    for tick, state, before, after in zip(ticks[1:-1], states[1:-1], speeds[:-1], speeds[1:], strict=True):
        if sum(tick.stance) == 2:
            force, moment = judge.ground_wrench(state, 0.5 * (before + after), (after - before) / dt_s)
            between = np.mean(
                [foot for foot, down in zip(tick.feet_m, tick.stance, strict=True) if down], axis=0
            )
            off.append(np.array((-moment[1], moment[0])) / force[2] - between[:2])
    size_mm = 1e3 * float(np.sqrt(np.mean(np.sum(np.square(off), axis=1))))
    print(f"{robot.name} {shares}: {size_mm:.2f} mm off")
    assert size_mm < 0.009e3 * robot.stance.height_m


def test_pendulum_left_to_itself_follows_the_sway() -> None:
    """Linear inverted pendulum (Kajita 2001), x'' = (g/z)(x - p), integrated by scipy from the
    sway's own state under its own zero-moment point: half a cycle on, it is where the sway is."""
    robot = juniper()
    gait = robot.gait("crawl")
    height, rate_hz = robot.stance.height_m, 0.8
    pace = (0.05, 0.0, 0.0, rate_hz)
    sway = PeriodicSway(neutral_feet(robot), gait, light(height))

    def point(time_s: float) -> Array:
        x, y, ax, ay = sway.at(time_s * rate_hz, pace)
        return np.array([x - height / GRAVITY_M_S2 * ax, y - height / GRAVITY_M_S2 * ay])

    def bend(time_s: float, state: Array) -> Array:
        return np.concatenate((state[2:], GRAVITY_M_S2 / height * (state[:2] - point(time_s))))

    start = np.array(sway.at(0.0, pace)[:2])
    soon, before = (np.array(sway.at(sign * 1e-6, pace)[:2]) for sign in (1.0, -1.0))
    speed = (soon - before) / 2e-6 * rate_hz
    time_s = 0.5 / rate_hz
    end = solve_ivp(bend, (0.0, time_s), np.concatenate((start, speed)), rtol=1e-10, atol=1e-12).y[:2, -1]
    assert end == pytest.approx(sway.at(0.5, pace)[:2], abs=1e-5)


def test_kajita_pendulum_by_its_numbers() -> None:
    """z .15, x0 -.03, v0 .3, t .1 -> -.006977828, .185268269 (Kajita 2001, recomputed): the judge
    used above, checked itself."""

    def bend(_: float, state: Array) -> Array:
        return np.array([state[1], GRAVITY_M_S2 / 0.15 * state[0]])

    end = solve_ivp(bend, (0.0, 0.1), [-0.03, 0.3], rtol=1e-11, atol=1e-13).y[:, -1]
    assert end == pytest.approx([-0.006977828, 0.185268269], abs=1e-8)


@ROBOTS
def test_quick_gaits_shift_less(robot: Robot) -> None:
    """The pendulum takes quick changes of support with its inertia."""
    feet = neutral_feet(robot)
    gait = replace(robot.gaits[-1], body_shift=1.0)
    sway = PeriodicSway(feet, gait, light(robot.stance.height_m))
    sizes = [np.abs(shifts(sway, (0.0, 0.0, 0.0, rate_hz))[0]).max() for rate_hz in (0.25, 1.0, 3.0)]
    assert sizes[0] > 1.1 * sizes[1] > 1.1**2 * sizes[2] or sizes[0] < 1e-6


def test_no_shift_is_no_sway() -> None:
    robot = stilt()
    sway = PeriodicSway(neutral_feet(robot), replace(robot.gaits[1], body_shift=0.0), light(0.2))
    assert not sway.active
    assert sway.at(0.3, (0.1, 0.0, 0.0, 1.0)) == (0.0, 0.0, 0.0, 0.0)


# ---- going over from one plan to another


def eased(steps: int) -> Array:
    """Shift over 2 s: a crawl taken up from standing, then given up, in steps."""
    robot = juniper()
    gait = robot.gait("crawl")
    plan = PeriodicSway(neutral_feet(robot), gait, light(robot.stance.height_m))
    shift = BodyShift()
    pace = (0.05, 0.0, 0.0, 0.8)
    rows = [shift.value]
    clock = 0.1
    shift.change(plan, clock, pace, 0.3)
    for step in range(steps):
        if step == steps // 2:
            shift.change(None, clock, pace, 0.3)
        clock += 2.0 * pace[3] / steps
        shift.advance(2.0 / steps, clock, pace)
        rows.append(shift.value)
    return np.array(rows)


def test_going_over_is_continuous_in_place_and_speed() -> None:
    """By refinement: the greatest jumps halve with the step."""
    jumps = []
    for steps in (1000, 2000, 4000):
        rows = eased(steps)
        speed = np.diff(rows, axis=0) * steps / 2.0
        jumps.append((np.abs(np.diff(rows, axis=0)).max(), np.abs(np.diff(speed, axis=0)).max()))
    for coarse, fine in pairwise(jumps):
        assert fine[0] < 0.55 * coarse[0]
        assert fine[1] < 0.6 * coarse[1]


def test_going_over_ends_on_the_new_plan() -> None:
    robot = juniper()
    plan = PeriodicSway(neutral_feet(robot), robot.gait("crawl"), light(robot.stance.height_m))
    shift = BodyShift()
    pace = (0.0, 0.0, 0.0, 0.5)
    shift.change(plan, 0.2, pace, 0.3)
    clock = 0.2
    for _ in range(31):
        clock += 0.01 * pace[3]
        shift.advance(0.01, clock, pace)
    assert shift.value == pytest.approx(plan.at(clock, pace)[:2], abs=1e-12)
    assert shift.acceleration == pytest.approx(plan.at(clock, pace)[2:], abs=1e-12)
    shift.change(None, clock, pace, 0.3)
    for _ in range(31):
        shift.advance(0.01, clock, pace)
    assert shift.value == (0.0, 0.0)
    assert not shift.moving


def test_a_quick_gait_does_not_throw_the_body_in_the_slow_one_after_it() -> None:
    """From an amble of one cycle a second to a crawl of 20 s, whenever: the body stays between
    the greatest shifts of both, and a little."""
    robot = juniper()
    quick, slow = (
        PeriodicSway(neutral_feet(robot), robot.gait(name), light(robot.stance.height_m))
        for name in ("amble", "crawl")
    )
    pace, slow_pace = (0.0, 0.0, 0.0, 1.0), (0.0, 0.0, 0.0, 0.05)
    greatest = np.linalg.norm(shifts(quick, pace)[0], axis=1).max()
    greatest += np.linalg.norm(shifts(slow, slow_pace)[0], axis=1).max()
    for start in range(20):
        shift = BodyShift()
        clock = 0.05 * start
        shift.change(quick, clock, pace, 0.25)
        for _ in range(100):
            clock += 0.002 * pace[3]
            shift.advance(0.002, clock, pace)
        shift.change(slow, clock, slow_pace, 5.0)
        for _ in range(600):
            clock += 0.01 * slow_pace[3]
            shift.advance(0.01, clock, slow_pace)
            assert math.hypot(*shift.value) < 1.2 * greatest


@examples(20)
@given(robot=st.sampled_from(fixed_robots()) | made_up(), pace=paces)
def test_many_times_at_once_are_the_times_one_by_one(robot: Robot, pace: Pace) -> None:
    vx, vy, yaw_rate, rate_hz = pace
    for gait in robot.gaits:
        sway = PeriodicSway(neutral_feet(robot), gait, light(robot.stance.height_m))
        on_the_spot, *added = sway.over_cycle(np.arange(7) / 7.0, rate_hz)
        together = on_the_spot + sum(v * by for v, by in zip((vx, vy, yaw_rate), added, strict=True))
        singly = np.array([sway.at(k / 7.0, pace)[:2] for k in range(7)])
        assert np.abs(together.T - singly).max() < 1e-12
