"""What the controller does when told: start, stop, posture, gait, lie down; what it refuses; m, rad, s."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.controller import Controller
from hobnail.errors import CommandError
from hobnail.robot import Robot
from robots import anvil, bramble, examples, juniper, made_up, stilt
from walks import (
    Array,
    Command,
    Walk,
    fewest_feet,
    gaits,
    perform,
    record,
    sequences,
    stands,
    supplies,
    walks,
)

ROBOTS = pytest.mark.parametrize(
    "robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name
)


def neutral_feet(robot: Robot) -> Array:
    """Feet of the neutral stance (body frame, m)."""
    feet: Array = record(Walk(robot).go(1)).feet_m[0]
    return feet


# ---- at the start


@ROBOTS
def test_a_new_controller_stands_still(robot: Robot) -> None:
    ticks = Walk(robot).go(20).ticks
    assert all(tick == ticks[0] for tick in ticks)
    assert ticks[0].settled
    assert not ticks[0].walking
    assert all(ticks[0].stance)
    assert ticks[0].pose == (0.0, 0.0, 0.0)
    assert ticks[0].height_m == robot.stance.height_m
    assert ticks[0].gait == robot.gaits[0].name


@ROBOTS
def test_at_rest_it_lies_still_until_it_is_told_to_rise(robot: Robot) -> None:
    walk = Walk(robot, at_rest=True).go(20)
    assert walk.ticks[-1].height_m == robot.stance.rest_height_m
    assert walk.ticks[-1].settled
    walk.controller.rise()
    walk.until_settled(10.0)
    standing = Walk(robot).go(1).ticks[0]
    assert walk.ticks[-1].height_m == robot.stance.height_m
    assert np.array(walk.ticks[-1].feet_m) == pytest.approx(np.array(standing.feet_m), abs=1e-12)
    assert np.ravel(walk.ticks[-1].joints_rad) == pytest.approx(np.ravel(standing.joints_rad), abs=1e-9)


@ROBOTS
def test_a_first_foot_lifts_soon_after_the_command(robot: Robot) -> None:
    """Within the time for one shift of the body and one spacing of lift-offs."""
    for gait in robot.gaits:
        walk = Walk(robot)
        walk.controller.gait(gait.name)
        walk.walk(0.5, 0.0, 0.0)
        walk.go(round(gait.cycle_range_s[1] / walk.dt_s))
        assert any(not all(tick.stance) for tick in walk.ticks)


# ---- stop


@ROBOTS
@examples(8)
@given(commands=sequences(walks(), walks(), gaits(), stands(), supplies(), most=5))
def test_any_walk_comes_to_a_stand_with_every_foot_in_its_place(
    robot: Robot, commands: list[tuple[Command, int]]
) -> None:
    walk = perform(Walk(robot), commands)
    walk.controller.stand()
    last = walk.until_settled().ticks[-1]
    assert all(last.stance)
    assert not last.walking
    assert last.velocity == (0.0, 0.0, 0.0)
    assert np.array(last.feet_m) == pytest.approx(neutral_feet(robot), abs=1.1e-4)


@examples(10)
@given(robot=made_up(), commands=sequences(walks(), gaits(), most=4))
def test_any_robot_comes_to_a_stand(robot: Robot, commands: list[tuple[Command, int]]) -> None:
    walk = perform(Walk(robot), commands)
    walk.controller.stand()
    last = walk.until_settled(120.0).ticks[-1]
    assert np.array(last.feet_m) == pytest.approx(neutral_feet(robot), abs=1.1e-4)


@ROBOTS
def test_stop_takes_the_braking_time_and_two_cycles_at_most(robot: Robot) -> None:
    """After that every foot has stepped to its place."""
    walk = Walk(robot).walk(1.0, 0.0, 0.0)
    walk.go(round(3.0 / walk.dt_s))
    gait = robot.gaits[0]
    envelope = robot.envelope
    braking_s = 1.5 * envelope.forward_m_s / envelope.acceleration_m_s2
    walk.controller.stand()
    before = len(walk.ticks)
    walk.until_settled()
    took_s = sum(tick.slowdown for tick in walk.ticks[before:]) * walk.dt_s
    assert took_s < braking_s + 2.5 * gait.cycle_range_s[1] + 0.5


@ROBOTS
def test_reverse_goes_through_rest_and_comes_back(robot: Robot) -> None:
    walk = Walk(robot).walk(0.5, 0.0, 0.0)
    walk.go(round(3.0 / walk.dt_s))
    far = walk.ticks[-1].pose[0]
    assert far > 0.0
    walk.walk(-0.5, 0.0, 0.0).go(round(4.0 / walk.dt_s))
    forward = [tick.velocity[0] for tick in walk.ticks]
    assert max(forward) > 0.0 > min(forward)
    assert walk.ticks[-1].pose[0] < far
    # No jump of the velocity: less than twice what the acceleration allows in a tick.
    steps = np.abs(np.diff([v / t.slowdown for v, t in zip(forward, walk.ticks, strict=True)]))
    assert steps.max() < 2.0 * robot.envelope.acceleration_m_s2 * walk.dt_s


@ROBOTS
def test_commands_that_change_every_tick_are_followed(robot: Robot) -> None:
    """As from a joystick: a slow sine of the speed, told anew each tick."""
    walk = Walk(robot)
    count = round(8.0 / walk.dt_s)
    for tick in range(count):
        walk.walk(0.4 * math.sin(2.0 * math.pi * tick / count), 0.0, 0.1).go(1)
    assert any(not all(tick.stance) for tick in walk.ticks)
    assert max(tick.velocity[0] for tick in walk.ticks) > 0.2 * robot.envelope.forward_m_s
    assert min(tick.velocity[0] for tick in walk.ticks) < -0.2 * robot.envelope.forward_m_s


# ---- gait


@ROBOTS
def test_gait_changes_while_walking(robot: Robot) -> None:
    """To each other gait: the old feet land, the new gait starts, the walk goes on; fewer feet
    than either gait has at its least are never down."""
    for old in robot.gaits:
        for new in robot.gaits:
            walk = Walk(robot)
            walk.controller.gait(old.name)
            walk.walk(0.4, 0.0, 0.0).go(round(1.5 * old.cycle_range_s[1] / walk.dt_s))
            walk.controller.gait(new.name)
            walk.go(round((old.cycle_range_s[1] + 2.0 * new.cycle_range_s[1]) / walk.dt_s))
            assert walk.ticks[-1].gait == new.name
            assert walk.ticks[-1].velocity[0] > 0.0
            least = min(fewest_feet(old), fewest_feet(new))
            assert min(sum(tick.stance) for tick in walk.ticks) >= least
            if old is not new:
                names = [tick.gait for tick in walk.ticks]
                first = names.index(new.name)
                assert all(walk.ticks[first - 1].stance)
                assert names[first:] == [new.name] * len(names[first:])


@ROBOTS
def test_gait_changes_at_once_when_standing(robot: Robot) -> None:
    controller = Controller(robot)
    controller.gait(robot.gaits[-1].name)
    tick = controller.tick(robot.period_s)
    assert tick.gait == robot.gaits[-1].name
    assert tick.settled


# ---- posture


@ROBOTS
def test_posture_is_reached_and_held(robot: Robot) -> None:
    limits = robot.posture_limits
    walk = Walk(robot).set_posture((0.3, 0.8, -0.6, 0.5, 0.4, -0.7))
    walk.until_settled(10.0)
    last = walk.ticks[-1]
    low, high = limits.height_m
    assert last.height_m == pytest.approx(low + 0.3 * (high - low))
    assert last.pose == pytest.approx((0.4 * limits.lean_m, -0.7 * limits.lean_m, 0.5 * limits.yaw_rad))
    # The feet are where the body frame, so tilted, has places on the ground that are the same.
    assert record(walk).on_ground_m[-1] == pytest.approx(record(Walk(robot).go(1)).on_ground_m[0], abs=1e-9)


@ROBOTS
def test_posture_moves_at_its_rates(robot: Robot) -> None:
    limits = robot.posture_limits
    walk = Walk(robot).set_posture((0.0, 1.0, 0.0, 0.0, 0.0, 0.0))
    walk.until_settled(10.0)
    heights = np.diff([tick.height_m for tick in walk.ticks]) / walk.dt_s
    assert np.abs(heights).max() <= limits.rate_m_s * (1.0 + 1e-9)
    rolls = np.diff([tick.tilt_rad[0] for tick in walk.ticks]) / walk.dt_s
    assert np.abs(rolls).max() <= limits.rate_rad_s * (1.0 + 1e-9)


def test_posture_signs() -> None:
    """ISO 8855 and the right-hand rule: positive roll lifts the left side, positive pitch lowers
    the front, positive yaw turns left."""
    robot = juniper()  # left-front, right-front, left-hind, right-hind
    rolled = Walk(robot).set_posture((0.5, 1.0, 0.0, 0.0, 0.0, 0.0)).until_settled().ticks[-1].feet_m
    assert rolled[0][2] < rolled[1][2]  # the left foot is farther below the body
    pitched = Walk(robot).set_posture((0.5, 0.0, 1.0, 0.0, 0.0, 0.0)).until_settled().ticks[-1].feet_m
    assert pitched[0][2] > pitched[2][2]
    turned = Walk(robot).set_posture((0.5, 0.0, 0.0, 1.0, 0.0, 0.0)).until_settled().ticks[-1].feet_m
    assert turned[0][1] < neutral_feet(robot)[0][1]  # seen from the body, the fore feet go right
    leant = Walk(robot).set_posture((0.5, 0.0, 0.0, 0.0, 1.0, 1.0)).until_settled().ticks[-1].feet_m
    assert leant[0][0] < neutral_feet(robot)[0][0]
    assert leant[0][1] < neutral_feet(robot)[0][1]


def test_none_leaves_a_value_as_it_is() -> None:
    walk = Walk(juniper())
    walk.controller.posture(height_m=0.15, roll_rad=0.1)
    walk.controller.posture(pitch_rad=0.05)
    walk.until_settled(10.0)
    assert walk.ticks[-1].height_m == pytest.approx(0.15)


# ---- lie down and rise


@ROBOTS
@pytest.mark.parametrize("within_s", [None, 1.5])
def test_lower_from_a_walk_ends_level_at_rest_height_with_every_foot_down(
    robot: Robot, within_s: float | None
) -> None:
    walk = Walk(robot).set_posture((0.5, 0.2, 0.2, 0.1, 0.1, 0.1)).walk(0.6, 0.0, 0.2)
    walk.go(round(2.0 / walk.dt_s))
    walk.controller.lower(within_s)
    begin = len(walk.ticks)
    walk.until_settled()
    last = walk.ticks[-1]
    rest, stance = robot.stance.rest_height_m, robot.stance.height_m
    # Feet planted in mid-stride, for the time's sake, may keep legs from folding all the way.
    assert rest <= last.height_m <= (rest if within_s is None else rest + 0.15 * (stance - rest))
    assert all(last.stance)
    heights = [tick.height_m for tick in walk.ticks[begin:]]
    lowest_in_air = min(
        (tick.height_m for tick in walk.ticks[begin:] if not all(tick.stance)), default=heights[0]
    )
    # No foot is in the air once the body goes down.
    assert lowest_in_air > 0.99 * heights[0]
    assert heights[-1] == min(heights)


@ROBOTS
def test_lower_within_a_time_keeps_to_it(robot: Robot) -> None:
    """From standing, when the servos can."""
    walk = Walk(robot).go(1)
    walk.controller.lower(2.0)
    walk.until_settled()
    assert (len(walk.ticks) - 1) * walk.dt_s == pytest.approx(2.0, abs=3.0 * walk.dt_s)


@ROBOTS
def test_a_hurried_lowering_is_slowed_by_the_servos_and_by_nothing_else(robot: Robot) -> None:
    """In no time at all, almost: the joints go as fast as they may and the feet stay put."""
    walk = Walk(robot).go(1)
    walk.controller.lower(0.02)
    walk.until_settled()
    found = record(walk)
    assert min(tick.slowdown for tick in walk.ticks) < 1.0
    assert all(tick.clamped == 0 for tick in walk.ticks)
    assert walk.ticks[-1].height_m == robot.stance.rest_height_m
    places = found.feet_m[:, :, :2]
    assert np.abs(places - places[0]).max() < 1e-4


def test_walking_while_lowering_lifts_no_foot_at_rest_height() -> None:
    """A fresh command to walk takes the place of the one to lie down, before the body is down."""
    walk = Walk(juniper()).walk(0.5, 0.0, 0.0).go(100)
    walk.controller.lower()
    walk.go(5)
    walk.walk(0.5, 0.0, 0.0).go(200)
    assert walk.ticks[-1].walking
    assert walk.ticks[-1].height_m == juniper().stance.height_m


# ---- what is refused

BAD = [math.nan, math.inf, -math.inf]


@pytest.mark.parametrize("bad", BAD)
@pytest.mark.parametrize("place", range(5))
def test_walk_refuses_what_is_no_number(bad: float, place: int) -> None:
    controller = Controller(juniper())
    values = [0.1, 0.0, 0.1, 0.0, 0.0]
    values[place] = bad
    with pytest.raises(CommandError, match="finite"):
        controller.walk(values[0], values[1], values[2], (values[3], values[4]))
    assert controller.tick(0.01).settled


@pytest.mark.parametrize(
    "command",
    [
        (1e6, -1e6, 1e6, (1e6, 1e6)),
        (1e308, 1e308, 1e308, (1e308, 1e308)),
        (1e200, 0.0, 0.0, (0.0, 0.0)),
        (0.0, 0.0, 1e200, (1e200, 0.0)),
        (-1e308, 1e308, 0.0, (0.0, 0.0)),
        (5e-324, 5e-324, 5e-324, (5e-324, 5e-324)),
        (0.0, 0.0, 5e-324, (0.0, 0.0)),
        (1e-170, 0.0, 0.0, (0.0, 0.0)),
        (1e-8, 1e-200, -1e-9, (0.0, 0.0)),
        (1e30, -1e-30, 1e-300, (1e300, 0.0)),
    ],
)
def test_walk_takes_or_refuses_any_numbers(
    command: tuple[float, float, float, tuple[float, float]],
) -> None:
    """Never another error than CommandError, and whatever is walked is within the envelope."""
    robot = juniper()
    walk = Walk(robot)
    try:
        walk.controller.walk(*command)
    except CommandError:
        walk.go(1)
        assert walk.ticks[-1].settled
        return
    walk.go(200)
    envelope = robot.envelope
    limits = np.array([envelope.forward_m_s, envelope.sideways_m_s, envelope.turn_rad_s])
    assert np.linalg.norm(np.array(walk.ticks[-1].velocity) / limits) <= 1.0 + 1e-9
    walk.controller.stand()
    walk.until_settled()


@pytest.mark.parametrize(
    "ask",
    [
        lambda controller: controller.posture(height_m=0.5),
        lambda controller: controller.posture(height_m=math.nan),
        lambda controller: controller.posture(roll_rad=0.5),
        lambda controller: controller.posture(pitch_rad=-0.5),
        lambda controller: controller.posture(yaw_rad=math.inf),
        lambda controller: controller.posture(lean_m=(0.0, 0.2)),
        lambda controller: controller.posture(lean_m=(math.nan, 0.0)),
        lambda controller: controller.gait("gallop"),
        lambda controller: controller.tick(0.0),
        lambda controller: controller.tick(-0.01),
        lambda controller: controller.tick(1.01),
        lambda controller: controller.tick(math.nan),
        lambda controller: setattr(controller, "supply_v", 0.0),
        lambda controller: setattr(controller, "supply_v", -6.0),
        lambda controller: setattr(controller, "supply_v", math.nan),
        lambda controller: setattr(controller, "supply_v", math.inf),
        lambda controller: controller.rise(0.0),
        lambda controller: controller.rise(-1.0),
        lambda controller: controller.lower(math.nan),
        lambda controller: controller.lower(math.inf),
    ],
)
def test_bad_values_are_refused_and_change_nothing(ask: Callable[[Controller], None]) -> None:
    """With the name, the value and what is allowed."""
    controller = Controller(juniper())
    before = controller.tick(0.01)
    with pytest.raises(CommandError, match="allowed") as caught:
        ask(controller)
    assert caught.value.exit_code == 64  # sysexits: usage
    assert controller.tick(0.01) == before


def test_a_posture_with_one_bad_value_changes_nothing() -> None:
    controller = Controller(juniper())
    with pytest.raises(CommandError, match="pitch_rad is 9"):
        controller.posture(height_m=0.15, pitch_rad=9.0)
    assert all(controller.tick(0.01).settled for _ in range(5))


def test_unknown_gait_names_those_there_are() -> None:
    with pytest.raises(CommandError, match="'gallop'; allowed: trot, crawl"):
        Controller(juniper()).gait("gallop")


# ---- settled


@ROBOTS
@examples(10)
@given(commands=sequences(walks(), stands(), gaits(), most=4), more=st.integers(1, 40))
def test_what_is_settled_does_not_move(robot: Robot, commands: list[tuple[Command, int]], more: int) -> None:
    walk = perform(Walk(robot), commands)
    walk.controller.stand()
    walk.until_settled()
    still = walk.ticks[-1]
    walk.go(more)
    for tick in walk.ticks[-more:]:
        assert tick.settled
        assert tick.pulses_us == pytest.approx(still.pulses_us, abs=0.5)  # the servos' lead runs out
        assert tick.feet_m == still.feet_m
        assert tick.pose == still.pose
