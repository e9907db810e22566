"""The route runner on the real controller: ends reached by the odometry, timeouts, posture, progress."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from hobnail.config import load_robot
from hobnail.controller import Controller, Tick
from hobnail.errors import CommandError
from hobnail.motion.planar import compose, exp_twist
from hobnail.robot import Robot, Vec3
from hobnail.service.route import RouteRunner, expected_seconds, load, moved
from hobnail.service.route_steps import ChangeGait, Move, Pose, Speed, Step, Wait

CONFIG = Path(__file__).parents[2] / "config"
ROBOTS = {name: load_robot(CONFIG / f"{name}.yaml") for name in ("juniper", "bramble")}

# What is promised for each step's end.
POSITION_M = 0.002
HEADING_RAD = math.radians(0.2)


class Walk:
    """A controller led by a route runner, as the state machine does it."""

    def __init__(self, steps: Sequence[Step], robot: Robot, *, dt_s: float | None = None) -> None:
        self.runner = RouteRunner(steps, robot)
        self.controller = Controller(robot)
        self.dt_s = dt_s or robot.period_s
        self.tick = self.controller.tick(self.dt_s)
        self.time_s = 0.0
        self.worst_load = 0.0
        self.ends: list[Tick] = []  # the tick at which each step ended

    def once(self) -> None:
        """One tick."""
        before = self.runner.index
        action = self.runner.update(self.tick, self.dt_s)
        self.worst_load = max(self.worst_load, load(action.twist, self.controller.robot))
        if self.runner.index > before:
            self.ends.append(self.tick)
        if action.gait is not None:
            self.controller.gait(action.gait)
        if action.posture:
            self.controller.posture(**action.posture)  # type: ignore[arg-type]
        self.controller.walk(*action.twist)
        self.tick = self.controller.tick(self.dt_s)
        self.time_s += self.dt_s

    def to_the_end(self) -> Walk:
        """Every step; returns itself."""
        while not self.runner.done:
            self.once()
        return self


def goals(steps: Sequence[Step]) -> list[Vec3]:
    """Where each step should end, from the origin: moves composed, everything else stays."""
    place, found = (0.0, 0.0, 0.0), []
    for step in steps:
        if isinstance(step, Move):
            place = compose(place, exp_twist(*step.twist, 1.0))
        found.append(place)
    return found


def apart(pose: Vec3, goal: Vec3) -> tuple[float, float]:
    """Distance (m) and angle (rad) between two poses."""
    return (
        math.hypot(pose[0] - goal[0], pose[1] - goal[1]),
        abs(math.remainder(pose[2] - goal[2], math.tau)),
    )


def assert_ends(walk: Walk, steps: Sequence[Step]) -> None:
    """Every step ended standing where the odometry should be by then."""
    assert walk.runner.failure == ""
    assert len(walk.ends) == len(steps)
    for step, end, goal in zip(steps, walk.ends, goals(steps), strict=True):
        distance_m, angle_rad = apart(end.pose, goal)
        assert distance_m <= POSITION_M, step
        assert angle_rad <= HEADING_RAD, step
        assert end.settled, step


def straight(length_m: float) -> Move:
    return Move(twist=(length_m, 0.0, 0.0))


def turn(degrees: float) -> Move:
    return Move(twist=(0.0, 0.0, math.radians(degrees)))


lengths = st.floats(-0.6, 0.6)
moves = st.one_of(
    lengths.map(straight),
    lengths.map(lambda y: Move(twist=(0.0, 0.5 * y, 0.0))),
    st.floats(-400.0, 400.0).map(turn),
    st.tuples(st.floats(0.05, 1.0), st.floats(-2.0, 2.0)).map(
        lambda arc: Move(twist=(arc[0] * abs(arc[1]), 0.0, arc[1]))
    ),
)
others = st.one_of(
    st.floats(0.0, 0.5).map(lambda s: Wait(duration_s=s)),
    st.floats(0.3, 1.0).map(lambda s: Speed(share=s)),
    st.integers(0, 3).map(lambda k: ChangeGait(name=str(k))),
)


def named(steps: Sequence[Step], robot: Robot) -> list[Step]:
    """The steps with the numbers of gaits replaced by names that the robot has."""
    gaits = robot.gaits
    return [
        ChangeGait(name=gaits[int(step.name) % len(gaits)].name) if isinstance(step, ChangeGait) else step
        for step in steps
    ]


@pytest.mark.parametrize("name", ROBOTS)
@settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(steps=st.lists(st.one_of(moves, moves, others), min_size=1, max_size=6))
@example(steps=[ChangeGait(name="1"), straight(0.3), turn(90), straight(-0.2)])
@example(steps=[turn(720)])
@example(steps=[straight(0.0), straight(0.0004), turn(0.05)])
def test_every_step_of_any_route_ends_where_the_odometry_should_be(name: str, steps: list[Step]) -> None:
    robot = ROBOTS[name]
    route = named(steps, robot)
    assert_ends(Walk(route, robot).to_the_end(), route)


@pytest.mark.parametrize("way", [1, -1])
def test_errors_do_not_add_up_round_a_square(way: int) -> None:
    # The square-path test both ways round (Borenstein & Feng 1996; memory), ten rounds.
    steps = [straight(0.15), turn(90 * way)] * 40
    walk = Walk(steps, ROBOTS["juniper"]).to_the_end()
    assert_ends(walk, steps)
    distance_m, angle_rad = apart(walk.ends[-1].pose, (0.0, 0.0, 0.0))
    assert distance_m <= POSITION_M
    assert angle_rad <= HEADING_RAD


def test_a_longer_tick_ends_as_truly() -> None:
    steps = [straight(0.4), turn(-90), Move(twist=(0.3, 0.0, 1.0))]
    walk = Walk(steps, ROBOTS["juniper"], dt_s=0.05).to_the_end()
    assert_ends(walk, steps)


def test_never_asks_for_more_than_its_share_of_the_envelope() -> None:
    steps: list[Step] = [Speed(share=0.5), straight(0.5), turn(180), Move(twist=(0.4, 0.0, 1.5))]
    walk = Walk(steps, ROBOTS["juniper"]).to_the_end()
    assert walk.worst_load <= 0.5 + 1e-9
    assert walk.worst_load > 0.49  # and does use it


def test_starts_where_the_robot_is_and_in_its_own_direction() -> None:
    walk = Walk([straight(0.2)], ROBOTS["juniper"])
    controller = walk.controller
    controller.walk(0.1, 0.05, 0.5)
    for _ in range(300):
        walk.tick = controller.tick(0.01)
    controller.stand()
    while not walk.tick.settled:
        walk.tick = controller.tick(0.01)
    start = walk.tick.pose
    walk.to_the_end()
    distance_m, angle_rad = apart(walk.ends[-1].pose, compose(start, (0.2, 0.0, 0.0)))
    assert distance_m <= POSITION_M
    assert angle_rad <= HEADING_RAD


def test_a_route_that_begins_in_mid_walk_waits_for_a_stand() -> None:
    walk = Walk([straight(0.2)], ROBOTS["juniper"])
    walk.controller.walk(0.2, 0.0, 0.0)
    for _ in range(150):
        walk.tick = walk.controller.tick(0.01)
    while not walk.tick.settled:
        walk.once()
    start = walk.tick.pose
    walk.to_the_end()
    assert apart(walk.ends[-1].pose, moved(start, (0.2, 0.0, 0.0)))[0] <= POSITION_M


def test_posture_and_lean_lead_a_route_nowhere() -> None:
    # The body leans and turns over its feet; the walk after it goes on in the old direction.
    robot = ROBOTS["juniper"]
    lean_m, yaw_rad = 0.02, 0.2
    steps: list[Step] = [straight(0.2), Pose(lean_m=(lean_m, 0.0), yaw_rad=yaw_rad), straight(0.2), turn(90)]
    walk = Walk(steps, robot).to_the_end()
    assert walk.runner.failure == ""
    for end, goal in zip(walk.ends[2:], goals(steps)[2:], strict=True):
        distance_m, angle_rad = apart(end.pose, compose(goal, (lean_m, 0.0, yaw_rad)))
        assert distance_m <= POSITION_M
        assert angle_rad <= HEADING_RAD


def test_a_posture_step_ends_when_the_posture_is_reached() -> None:
    robot = ROBOTS["juniper"]
    height_m = robot.posture_limits.height_m[0]
    walk = Walk([Pose(height_m=height_m)], robot).to_the_end()
    assert walk.ends[0].height_m == pytest.approx(height_m, abs=1e-9)


def test_the_gait_changes_where_the_route_says() -> None:
    walk = Walk([straight(0.1), ChangeGait(name="crawl"), straight(0.1)], ROBOTS["juniper"]).to_the_end()
    assert [end.gait for end in walk.ends] == ["trot", "trot", "crawl"]


def test_waiting_takes_its_time_and_nothing_moves() -> None:
    walk = Walk([Wait(duration_s=1.5)], ROBOTS["juniper"]).to_the_end()
    assert walk.time_s == pytest.approx(1.5, abs=0.03)
    assert walk.tick.pose == (0.0, 0.0, 0.0)


def test_takes_about_as_long_as_it_says() -> None:
    steps: list[Step] = [straight(0.8), turn(180), Wait(duration_s=1.0)]
    robot = ROBOTS["juniper"]
    walk = Walk(steps, robot).to_the_end()
    told_s = sum(expected_seconds(steps, robot))
    assert told_s < walk.time_s < 1.3 * told_s + 1.0


class Stuck:
    """A robot that does not follow: the ticks of a standing one, whatever is asked."""

    def __init__(self, robot: Robot, **changes: object) -> None:
        self.tick = Controller(robot).tick(robot.period_s)._replace(**changes)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("step", "changes", "words"),
    [
        (straight(0.3), {}, "300 mm and 0.0 deg are left"),
        (turn(90), {"slowdown": 0.4}, "joints at their speed limit slow the robot to 40%"),
        (Wait(duration_s=1.0), {"settled": False}, "does not come to a stand"),
    ],
)
def test_a_step_that_does_not_end_ends_the_route(step: Step, changes: dict[str, object], words: str) -> None:
    robot = ROBOTS["juniper"]
    tick = Stuck(robot, **changes).tick
    runner = RouteRunner([step, straight(0.1)], robot)
    limit = round(200.0 / robot.period_s)
    ticks = 0
    while not runner.done and ticks < limit:
        action = runner.update(tick, robot.period_s)
        ticks += 1
    assert ticks < limit
    assert "step 1 of 2" in runner.failure
    assert words in runner.failure
    assert action.twist == (0.0, 0.0, 0.0)
    assert runner.update(tick, robot.period_s) == type(action)()
    assert runner.progress()["failure"] == runner.failure
    assert runner.progress()["done"] is True


def test_the_reference_waits_for_a_robot_that_stands_still() -> None:
    # Without it, the robot would later run after a reference that is long gone.
    robot = ROBOTS["juniper"]
    tick = Stuck(robot).tick
    runner = RouteRunner([straight(1.0)], robot)
    for _ in range(500):
        runner.update(tick, robot.period_s)
    share = runner.progress()["done_share"]
    assert isinstance(share, float)
    assert share < 0.035


def test_catching_up_keeps_to_the_share_of_the_envelope() -> None:
    robot = ROBOTS["juniper"]
    tick = Stuck(robot).tick
    runner = RouteRunner([Speed(share=0.2), straight(1.0)], robot)
    asked = [load(runner.update(tick, robot.period_s).twist, robot) for _ in range(500)]
    assert max(asked) == pytest.approx(0.2, abs=1e-9)


def test_the_reference_slows_as_the_robot_is_slowed() -> None:
    robot = ROBOTS["juniper"]
    shares = []
    for slowdown in (1.0, 0.5):
        tick = Stuck(robot, slowdown=slowdown).tick
        runner = RouteRunner([straight(1.0)], robot)
        for _ in range(10):
            runner.update(tick, robot.period_s)
        shares.append(runner.progress()["done_share"])
    assert shares[1] == pytest.approx(0.5 * float(str(shares[0])), rel=0.05)


def test_progress_only_grows_and_names_the_step() -> None:
    walk = Walk([straight(0.2), Wait(duration_s=0.2), turn(45)], ROBOTS["juniper"])
    shares, texts = [], []
    while not walk.runner.done:
        walk.once()
        progress = walk.runner.progress()
        shares.append(progress["done_share"])
        texts.append((progress["step"], progress["steps"], progress["description"]))
    assert shares == sorted(shares)  # type: ignore[type-var]
    assert list(dict.fromkeys(texts)) == [
        (1, 3, "forward 200 mm"),
        (2, 3, "wait 0.2 s"),
        (3, 3, "turn +45 deg"),
    ]
    assert walk.runner.progress()["done_share"] == pytest.approx(1.0)
    assert walk.runner.progress()["remaining_s"] == pytest.approx(0.0)


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        ([], "has no steps"),
        ([ChangeGait(name="gallop")], "step 1 asks for gait gallop, juniper allows trot or crawl"),
        (
            [Wait(duration_s=1.0), Pose(height_m=0.5)],
            "step 2 asks for height 500 mm, juniper allows 120 to 195 mm",
        ),
        ([Pose(roll_rad=-0.5)], "roll -28.65 deg"),
        ([Pose(lean_m=(0.03, 0.03))], "a lean of 42.43 mm, juniper allows at most 30 mm"),
    ],
)
def test_a_route_that_does_not_fit_the_robot_is_refused(steps: list[Step], words: str) -> None:
    with pytest.raises(CommandError) as caught:
        RouteRunner(steps, ROBOTS["juniper"])
    assert words in str(caught.value)


def test_two_runs_are_bit_identical() -> None:
    steps: list[Step] = [straight(0.2), turn(30), ChangeGait(name="crawl"), straight(0.05)]
    first, second = (Walk(steps, ROBOTS["juniper"]).to_the_end() for _ in range(2))
    assert [end.pose for end in first.ends] == [end.pose for end in second.ends]
