"""A steady walk that recurs is the walk that would have been worked out; m, rad, s."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from itertools import chain
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.controller import Tick
from hobnail.motion import recurrence
from hobnail.motion.foot import Swing
from hobnail.motion.glide import AT_REST
from hobnail.motion.recurrence import Recurrence, WalkState, comes_round, motion_between, moved_over_ground
from hobnail.robot import Robot
from robots import bramble, examples, juniper, made_up
from walks import (
    Array,
    Command,
    Walk,
    assert_sound,
    gaits,
    perform,
    postures,
    sequences,
    stands,
    supplies,
    walks,
)

# Two walks of which one is worked out throughout may differ by rounding, tick by tick.
SAME = 1e-9


class WorkedOut(Recurrence[Any]):
    """Keeps nothing, so that every tick is worked out."""

    def keep(self, *_: Any) -> None:
        """Nothing is kept."""


def twin(robot: Robot) -> Walk:
    """A walk whose every tick is worked out."""
    walk = Walk(robot)
    walk.controller._recurrence = WorkedOut()
    return walk


def recurring(walk: Walk) -> bool:
    """Whether the next tick is one that was kept."""
    return walk.controller._recurrence.turning


def numbers(ticks: Sequence[Tick]) -> Array:
    """All numbers of all ticks but the pulses, a row a tick."""
    return np.array(
        [
            [
                *chain(*tick.joints_rad, *tick.commanded_rad, *tick.feet_m),
                *tick.pose,
                *tick.velocity,
                *tick.tilt_rad,
                *(tick.slowdown, tick.height_m, tick.clamped, tick.out_of_reach),
            ]
            for tick in ticks
        ]
    )


def assert_same(walk: Walk, other: Walk) -> None:
    """The same ticks, but for rounding; pulses to 1e-6 us."""
    assert [(t.gait, t.stance, t.walking, t.settled) for t in walk.ticks] == [
        (t.gait, t.stance, t.walking, t.settled) for t in other.ticks
    ]
    assert np.abs(numbers(walk.ticks) - numbers(other.ticks)).max() <= SAME
    pulses, expected = (np.array([tick.pulses_us for tick in each.ticks]) for each in (walk, other))
    assert np.abs(pulses - expected).max() <= 1e-6


@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
def test_a_long_steady_walk_recurs_and_is_the_same(robot: Robot) -> None:
    walk, other = Walk(robot), twin(robot)
    for each in (walk, other):
        each.walk(0.3, 0.1, 0.2).go(400)
    assert recurring(walk)
    for each in (walk, other):
        each.go(400).walk(-0.1, 0.2, 0.1).go(37).set_posture([0.5, 0.3, -0.3, 0.2, 0.1, 0.0]).go(300)
        each.controller.stand()
        each.until_settled()
    assert_same(walk, other)
    assert_sound(walk)


def test_hours_of_recurring_add_up_to_no_more_than_rounding() -> None:
    """The arc is the one commanded, by hand: after whole turns the robot is where it was."""
    robot = juniper()
    walk = Walk(robot).walk(0.0, 0.0, 0.3).go(500)
    assert recurring(walk)
    start = walk.ticks[-1].pose
    rate = walk.ticks[-1].velocity[2]
    walk.go(20_000)
    assert recurring(walk)
    assert walk.ticks[-1].pose[2] - start[2] == pytest.approx(rate * 20_000 * robot.period_s, rel=1e-9)


@given(commands=sequences(walks(), stands(), gaits(), postures(), supplies()), wait=st.integers(0, 120))
@examples(12)
@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
def test_whatever_comes_between(robot: Robot, commands: Sequence[tuple[Command, int]], wait: int) -> None:
    """A recurring walk goes on, at any tick of its cycle and with any command, as if every
    tick of it had been worked out."""
    walk, other = Walk(robot), twin(robot)
    for each in (walk, other):
        each.walk(0.2, 0.0, 0.1).go(300 + wait)
    assert recurring(walk)
    assert_same(perform(walk, commands), perform(other, commands))


@given(robot=made_up())
@examples(10)
def test_made_up_robots(robot: Robot) -> None:
    walk, other = Walk(robot), twin(robot)
    for each in (walk, other):
        each.walk(0.2, 0.1, -0.2).go(500).walk(0.0, 0.3, 0.1).go(100)
    assert_same(walk, other)


def test_a_cycle_of_no_whole_number_of_ticks_does_not_recur() -> None:
    robot = juniper()
    gait = replace(robot.gaits[0], cycle_s=0.5037)
    walk = Walk(replace(robot, gaits=(gait,))).walk(0.3, 0.0, 0.0).go(600)
    assert not recurring(walk)


def test_another_tick_or_supply_is_worked_out() -> None:
    walk = Walk(juniper()).walk(0.3, 0.0, 0.0).go(400)
    assert recurring(walk)
    walk.controller.supply_v = walk.controller.supply_v
    assert recurring(walk)
    walk.controller.supply_v = 0.95 * walk.controller.supply_v
    assert not recurring(walk)
    walk.go(400)
    assert recurring(walk)
    walk.dt_s *= 0.5
    walk.go(1)
    assert not recurring(walk)
    assert_sound(walk)


def test_the_same_command_again_leaves_it_as_it_is() -> None:
    walk = Walk(juniper()).walk(0.3, 0.0, 0.0).go(400)
    walk.walk(0.3, 0.0, 0.0)
    assert recurring(walk)
    walk.walk(0.3, 0.0, 0.01)
    assert not recurring(walk)


def test_what_is_kept_has_an_end(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(recurrence, "LONGEST", 20)
    walk = Walk(juniper()).walk(0.3, 0.0, 0.0).go(400)
    assert not recurring(walk)


# ---- what comes round

FOOT = (0.1, 0.05, 0.0, 0.3, 0.25, None, True)
FLYING = (0.2, 0.05, 0.01, 0.8, 0.0, Swing((0.1, 0.05), (0.3, 0.05), AT_REST, AT_REST), True)
STATE = WalkState(
    pose=(0.0, 0.0, 0.0),
    clock=0.4,
    hold=-1.0,
    share=1.0,
    shift=((0.01, 0.0), (0.0, 0.0), (0.0, 0.0), (AT_REST, AT_REST), 0.0, (AT_REST, AT_REST), 0.0),
    pace=([0.1, 0.0, 0.0, 2.0], [0.0] * 4, [0.1, 0.0, 0.0, 2.0], [(0.0, 0.0)] * 4, 0.0, [], 0.0, False),
    posture=([0.2, 0.0, 0.0, 0.0, 0.0, 0.0], [0.2, 0.0, 0.0, 0.0, 0.0, 0.0], [], 0.0, [], 0.0, False),
    feet=[FOOT, FLYING],
    feed_forward=(((0.1, 0.2, 0.3),), [(0.0, 0.0, 0.0)], 0.01),
)


def test_a_state_moved_over_the_ground_comes_round() -> None:
    later = moved_over_ground(STATE, (0.3, -0.2, 1.1))
    assert comes_round(STATE, later)
    assert motion_between(STATE.pose, later.pose) == pytest.approx((0.3, -0.2, 1.1), abs=1e-15)


@pytest.mark.parametrize(
    "change",
    [
        {"clock": 0.41},
        {"hold": 0.1},
        {"share": 0.9},
        {"shift": ((0.02, 0.0), *STATE.shift[1:])},
        {"pace": ([0.2, 0.0, 0.0, 2.0], *STATE.pace[1:])},
        {"posture": ([0.3, *STATE.posture[0][1:]], *STATE.posture[1:])},
        {"feet": [(0.101, *FOOT[1:]), FLYING]},
        {"feet": [(*FOOT[:2], 0.001, *FOOT[3:]), FLYING]},
        {"feet": [(*FOOT[:3], 0.31, *FOOT[4:]), FLYING]},
        {"feet": [(*FOOT[:4], 0.3, *FOOT[5:]), FLYING]},
        {"feet": [(*FOOT[:6], False), FLYING]},
        {"feet": [FOOT, (*FLYING[:5], None, True)]},
        {"feet": [FOOT, (*FLYING[:5], Swing((0.11, 0.05), (0.3, 0.05), AT_REST, AT_REST), True)]},
        {"feet": [FOOT, (*FLYING[:5], Swing((0.1, 0.05), (0.3, 0.06), AT_REST, AT_REST), True)]},
        {"feet": [FOOT, (*FLYING[:5], Swing((0.1, 0.05), (0.3, 0.05), (0.0, 0.0, 0.1), AT_REST), True)]},
        {"feed_forward": (((0.1, 0.2, 0.31),), *STATE.feed_forward[1:])},
        {"feed_forward": (((0.1, 0.2, 0.3),), [(0.0, 0.1, 0.0)], 0.01)},
    ],
)
def test_what_differs_does_not_come_round(change: dict[str, Any]) -> None:
    assert not comes_round(STATE, STATE._replace(**change))
    assert not comes_round(STATE._replace(**change), STATE)


def test_the_clock_comes_round_past_one() -> None:
    just, almost = STATE._replace(clock=1e-13), STATE._replace(clock=1.0 - 1e-13)
    assert comes_round(just, almost)


def test_motion_over_the_ground_by_hand() -> None:
    """A quarter turn to the left about the origin, then 1 m ahead."""
    moved = moved_over_ground(STATE, (1.0, 0.0, math.pi / 2))
    assert moved.feet[0][:2] == pytest.approx((0.95, 0.1), abs=1e-15)
    swing = moved.feet[1][5]
    assert swing is not None
    assert swing.target == pytest.approx((0.95, 0.3), abs=1e-15)
    assert moved.pose == pytest.approx((1.0, 0.0, math.pi / 2))


def test_a_controller_that_recurs_gives_the_same_bits_twice() -> None:
    first, second = (Walk(juniper()).walk(0.2, 0.1, 0.3).go(700).ticks for _ in range(2))
    assert first == second
