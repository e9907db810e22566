"""Trim by measured walks: a plant with a response of its own, measured, trimmed, walks as it is told; m, rad.

The plant lets the controller's feet make their motion and moves by its own true
response; the tape reads where it came to stand.
"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.controller import Controller
from hobnail.errors import CommandError
from hobnail.motion.planar import Pose, Twist, compose, exp_twist
from hobnail.response import AS_MADE, feet_twist, log_pose, relative, true_twist
from hobnail.robot import Robot, WalkResponse
from hobnail.service.route import RouteRunner
from hobnail.service.route_steps import Move
from hobnail.workshop.trim import KINDS, Walk, improved, in_words
from robots import examples, juniper

TRUE = WalkResponse(ahead=(0.93, 0.04, -0.05), sideways=(0.03, 0.85, 0.09), turn=1.08)
COMMANDS: dict[str, Twist] = {
    "ahead": (0.12, 0.0, 0.0),
    "sideways": (0.0, 0.06, 0.0),
    "turn": (0.0, 0.0, 0.5),
}


def near_identity() -> st.SearchStrategy[WalkResponse]:
    true, drift, veer = st.floats(0.85, 1.15), st.floats(-0.1, 0.1), st.floats(-0.15, 0.15)
    return st.builds(
        WalkResponse,
        ahead=st.tuples(true, drift, veer),
        sideways=st.tuples(drift, true, veer),
        turn=true,
    )


def held(response: WalkResponse, truly: WalkResponse, kind: str, time_s: float = 8.0) -> Walk:
    """A command held for a time by a robot whose feet are told through `response`, on a plant."""
    command = COMMANDS[kind]
    feet = feet_twist(response, command)
    return Walk(kind, exp_twist(*command, time_s), exp_twist(*true_twist(truly, feet), time_s))


def flat(response: WalkResponse) -> list[float]:
    return [*response.ahead, *response.sideways, response.turn]


@given(near_identity())
def test_one_walk_of_each_kind_tells_the_whole_response(truly: WalkResponse) -> None:
    response = AS_MADE
    for kind in KINDS:
        response = improved(response, held(response, truly, kind, 12.0))
    assert flat(response) == pytest.approx(flat(truly), abs=1e-9)


@given(near_identity(), near_identity(), st.sampled_from(KINDS))
def test_a_second_walk_mends_the_first(before: WalkResponse, truly: WalkResponse, kind: str) -> None:
    """Whatever was in use: after one more walk of a kind, that command truly happens."""
    response = improved(before, held(before, truly, kind, 12.0))
    command = COMMANDS[kind]
    assert true_twist(response, feet_twist(before, command)) == pytest.approx(
        true_twist(truly, feet_twist(before, command))
        if kind != "turn"
        else (
            *true_twist(response, feet_twist(before, command))[:2],
            true_twist(truly, feet_twist(before, command))[2],
        ),
        abs=1e-9,
    )
    # Walked again, little is left, and less with every walk.
    for _ in range(4):
        response = improved(response, held(response, truly, kind, 12.0))
    done = true_twist(truly, feet_twist(response, command))
    assert done[KINDS.index(kind)] == pytest.approx(command[KINDS.index(kind)], rel=1e-3)


class Plant:
    """The robot on its floor: by its odometry, and truly.

    What its feet make is told by an untrimmed robot that gets the same pulses.
    """

    def __init__(self, robot: Robot, truly: WalkResponse) -> None:
        self.response = robot.walk
        self.controller = Controller(robot)
        self.untrimmed = Controller(replace(robot, walk=AS_MADE))
        self.truly = truly
        self.period_s = robot.period_s
        self.pose: Pose = (0.0, 0.0, 0.0)
        self.odometry: Pose = (0.0, 0.0, 0.0)
        self._by_feet: Pose | None = None

    def command(self, twist: Twist) -> None:
        self.controller.walk(*twist)
        self.untrimmed.walk(*feet_twist(self.response, twist))

    def walk(self, twist: Twist, time_s: float) -> None:
        self.command(twist)
        self.go(round(time_s / self.period_s))
        self.command((0.0, 0.0, 0.0))
        while not self.go(1):
            pass

    def go(self, ticks: int) -> bool:
        for _ in range(ticks):
            tick, made = self.controller.tick(self.period_s), self.untrimmed.tick(self.period_s)
            assert tick.pulses_us == made.pulses_us
            step = log_pose(relative(self._by_feet or made.pose, made.pose))
            self.pose = compose(self.pose, exp_twist(*true_twist(self.truly, step), 1.0))
            self._by_feet = made.pose
            self.odometry = tick.pose
            self.tick = tick
        return tick.settled


@cache
def trimmed(rounds: int) -> WalkResponse:
    response = AS_MADE
    for _ in range(rounds):
        for kind in KINDS:
            plant = Plant(replace(juniper(), walk=response), TRUE)
            plant.walk(COMMANDS[kind], 9.0)
            response = improved(response, Walk(kind, plant.odometry, plant.pose))
    return response


def errors(response: WalkResponse, command: Twist) -> tuple[float, float]:
    """How far from where its odometry says a robot comes to stand: m, rad."""
    plant = Plant(replace(juniper(), walk=response), TRUE)
    plant.walk(command, 8.0)
    off = relative(plant.odometry, plant.pose)
    return math.hypot(off[0], off[1]), abs(off[2])


@pytest.mark.parametrize("command", [*COMMANDS.values(), (0.1, 0.02, -0.3), (-0.1, 0.0, 0.0)], ids=str)
def test_measured_and_trimmed_it_goes_where_its_odometry_says(command: Twist) -> None:
    before_m, before_rad = errors(AS_MADE, command)
    assert before_m > 0.01 or before_rad > 0.02
    after_m, after_rad = errors(trimmed(1), command)
    assert after_m < 0.002
    assert after_rad < 0.002


def test_trimmed_it_goes_as_commanded() -> None:
    plant = Plant(replace(juniper(), walk=trimmed(1)), TRUE)
    plant.command((0.1, 0.0, 0.0))
    plant.go(300)
    start = plant.pose
    plant.go(400)
    moved = relative(start, plant.pose)
    sway = 0.003  # within a cycle the body is a little ahead or behind
    assert moved[0] == pytest.approx(0.1 * 400 * plant.period_s, abs=sway)
    assert moved[1] == pytest.approx(0.0, abs=sway)
    assert moved[2] == pytest.approx(0.0, abs=1e-3)


def test_a_route_truly_ends_where_it_leads() -> None:
    """800 mm along an arc of 40 degrees, on a floor that untrimmed leads somewhere else."""
    step = Move(twist=(0.8, 0.0, math.radians(40.0)))
    wanted = exp_twist(*step.twist, 1.0)
    offs = []
    for response in (AS_MADE, trimmed(1)):
        robot = replace(juniper(), walk=response)
        plant, runner = Plant(robot, TRUE), RouteRunner([step], robot)
        plant.go(1)
        while not runner.done:
            plant.command(runner.update(plant.tick, plant.period_s).twist)
            plant.go(1)
        assert runner.failure == ""
        x, y, yaw = relative(wanted, plant.pose)
        offs.append((math.hypot(x, y), abs(yaw)))
    (before_m, before_rad), (after_m, after_rad) = offs
    assert before_m > 0.05
    assert before_rad > 0.01
    assert after_m < 0.004
    assert after_rad < 0.004


@pytest.mark.parametrize(
    ("walk", "told"),
    [
        (Walk("ahead", (0.3, 0, 0), (0.3, 0, 0)), "the way ahead is 300 mm; allowed: 500 mm or more"),
        (Walk("ahead", (2.0, 0, 0), (0.1, 0, 0)), "would truly be 50 mm"),
        (Walk("sideways", (0.0, -0.4, 0), (0, -0.4, 0)), "the way sideways is -400 mm"),
        (Walk("turn", (0, 0, 0.5), (0, 0, 3)), "the turn is 28.6479 deg; allowed: 90 deg or more"),
        (Walk("ahead", (2.0, 0, 0), (2.0, 0, 2.5)), "heading changed by 143.239 deg"),
        (Walk("ahead", (2.0, 0, 0), (1.0, 0, 0)), "the way ahead would truly be 500 mm"),
        (Walk("ahead", (2.0, 0, 0), (1.9, 0.9, 0)), "the way to the left"),
        (Walk("ahead", (2.0, 0, 0), (1.5, 0.9, 1.6)), "the turn to the left"),
        (Walk("sideways", (0, 1.0, 0), (0, 1.5, 0)), "allows 700 to 1400 mm"),
        (Walk("turn", (0, 0, 2 * math.pi), (0, 0, math.pi)), "the turn would truly be 180 deg"),
        (Walk("turn", (0, 0, 2 * math.pi), (0, 0, -2 * math.pi)), "the turn would truly be -360"),
    ],
)  # fmt: skip
def test_what_no_good_robot_does_is_refused(walk: Walk, told: str) -> None:
    with pytest.raises(CommandError, match=told):
        improved(AS_MADE, walk)


def test_beyond_the_bounds_the_causes_are_named() -> None:
    with pytest.raises(
        CommandError, match=r"floor that slips.*links.*horns.*hobnail calibrate.*measure again"
    ):
        improved(AS_MADE, Walk("ahead", (2.0, 0, 0), (1.2, 0, 0)))


def test_walking_back_or_to_the_right_measures_the_same() -> None:
    ahead = improved(AS_MADE, Walk("ahead", (2.0, 0, 0), (1.9, 0, 0)))
    back = improved(AS_MADE, Walk("ahead", (-2.0, 0, 0), (-1.9, 0, 0)))
    assert flat(ahead) == pytest.approx(flat(back))
    assert ahead.ahead[0] == pytest.approx(0.95)


def test_a_curved_way_is_taken_for_the_arc_that_it_is() -> None:
    """By hand: a quarter of a circle of 2 m radius is 3.1416 m of way for 90 degrees of turn."""
    way = math.pi
    response = improved(AS_MADE, Walk("ahead", (way, 0.0, 0.0), (2.0, 2.0, math.pi / 2)))
    assert response.ahead == pytest.approx((1.0, 0.0, 0.5), abs=1e-12)


def test_turns_may_be_more_than_whole_ones() -> None:
    response = improved(AS_MADE, Walk("turn", (0, 0, math.radians(1080)), (0, 0, math.radians(1026))))
    assert response.turn == pytest.approx(0.95)
    assert in_words(response)[-1] == "a full turn by the feet: 342.0 deg"


@given(near_identity())
@examples(20)
def test_the_map_is_the_matrix(truly: WalkResponse) -> None:
    """Against numpy: three walks are three columns."""
    columns = [np.array(log_pose(held(AS_MADE, truly, kind, 1.0).true)) for kind in KINDS]
    sizes = [COMMANDS[kind][KINDS.index(kind)] for kind in KINDS]
    matrix = np.array([column / size for column, size in zip(columns, sizes, strict=True)]).T
    assert matrix == pytest.approx(
        np.array([truly.ahead, truly.sideways, (0.0, 0.0, truly.turn)]).T, abs=1e-9
    )
