"""States and requests of the machine, on the real controller and an injected clock."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from typing import Any

import pytest

from hobnail.errors import CommanderError, CommandError, StateError
from hobnail.robot import Robot
from hobnail.service.body import Body
from hobnail.service.states import ALLOWED, LATCHED, NEXT, TRANSITIONS, State
from machine_rig import WAYS_IN, Rig, in_state
from robots import bramble, juniper


def test_every_state_has_a_way_in_and_a_line_in_every_table() -> None:
    assert set(WAYS_IN) == set(State) == set(TRANSITIONS) == set(NEXT)
    reached = frozenset().union(*TRANSITIONS.values())
    assert reached == set(State)


@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
def test_whole_life_goes_through_the_states_in_order(robot: Robot) -> None:
    rig = Rig(robot)
    rig.go(0.5)
    rig.walk(0.05)
    rig.ask("stand")
    rig.until(State.STANDING)
    rig.ask("off")
    rig.until(State.OFF)
    assert rig.states == [
        State.OFF, State.WAKING, State.RESTING, State.RISING, State.STANDING, State.WALKING,
        State.STANDING, State.LOWERING, State.RESTING, State.OFF,
    ]  # fmt: skip
    assert rig.machine.counters["clamped"] == 0


def test_no_pulse_before_the_first_request() -> None:
    rig = Rig(juniper())
    rig.go(5.0)
    rig.expect(State.OFF)
    assert rig.frame is not None
    assert rig.frame.release
    assert rig.woken == []


@pytest.mark.parametrize("group", [1, 3, 5])
def test_joints_wake_one_group_an_interval(group: int) -> None:
    safety = replace(juniper().safety, wake_group=group, wake_interval_s=0.1)
    rig = Rig(replace(juniper(), safety=safety))
    rig.ask("stand")
    rig.until(State.RESTING)
    sizes = [len(joints) for _, joints in rig.woken]
    assert sum(sizes) == 12
    assert max(sizes) <= group
    times = [time_s for time_s, _ in rig.woken]
    assert all(b - a >= 0.1 - 1e-6 for a, b in pairwise(times))
    assert [joint for _, joints in rig.woken for joint in joints] == list(range(12))


def test_joints_wake_at_the_rest_posture_when_nothing_was_recorded() -> None:
    rig = Rig(juniper())
    rest = Body(juniper(), None)
    rest.begin_waking()
    while not rest.wake(0.01):
        pass
    rig.ask("rest")
    while rig.state is not State.RESTING:
        frame = rig.tick()
        for angle, at_rest in zip(frame.joints_rad, rest.joints_rad, strict=True):
            assert angle is None or angle == pytest.approx(at_rest, abs=1e-6)


def test_joints_wake_at_the_recorded_posture_and_move_to_rest_together() -> None:
    standing = Rig(juniper())
    standing.stand()
    assert standing.frame is not None
    posture = [angle for angle in standing.frame.joints_rad if angle is not None]
    rig = Rig(juniper(), posture)
    rig.ask("rest")
    while len(rig.woken) < 12:
        frame = rig.tick()
        for angle, recorded in zip(frame.joints_rad, posture, strict=True):
            assert angle is None or angle == pytest.approx(recorded, abs=1e-9)
    # All joints cover the same share of their way at any time: none waits for another.
    rig.until(State.RESTING)
    assert rig.frame is not None
    goal = [angle for angle in rig.frame.joints_rad if angle is not None]
    again = Rig(juniper(), posture)
    again.ask("rest")
    shares_seen = 0
    while again.state is not State.RESTING:
        frame = again.tick()
        shares = [
            (angle - a) / (b - a)
            for angle, a, b in zip(frame.joints_rad, posture, goal, strict=True)
            if angle is not None and abs(b - a) > 0.05
        ]
        if len(again.woken) == 12 and shares:
            shares_seen += 1
            assert max(shares) - min(shares) < 1e-6
    assert shares_seen > 20


@pytest.mark.parametrize(
    "posture", [[0.1] * 11, [float("nan")] * 12, [1e9] * 12, []], ids=["short", "nan", "far", "empty"]
)
def test_a_damaged_recorded_posture_is_not_used(posture: list[float]) -> None:
    damaged, none = Rig(juniper(), posture), Rig(juniper())
    for rig in (damaged, none):
        rig.ask("rest")
        rig.until(State.RESTING)
    assert damaged.frame == none.frame


def test_off_while_waking_ends_the_pulses_at_once() -> None:
    rig = in_state("waking")
    rig.ask("off")
    frame = rig.tick()
    assert frame.state is State.OFF
    assert frame.release


def test_off_from_a_walk_goes_through_rest() -> None:
    rig = in_state("walking")
    rig.ask("off")
    rig.until(State.OFF)
    assert rig.states[-4:] == [State.WALKING, State.LOWERING, State.RESTING, State.OFF]


def test_stand_while_lowering_rises_again() -> None:
    rig = in_state("lowering")
    rig.ask("stand")
    rig.until(State.STANDING, 5.0)


def test_rest_while_rising_lies_down_again() -> None:
    rig = in_state("rising")
    rig.ask("rest")
    rig.until(State.RESTING, 5.0)


def test_wakes_where_it_went_off() -> None:
    rig = in_state("standing")
    rig.ask("off")
    rig.until(State.OFF)
    rig.woken.clear()
    rig.ask("rest")
    rig.until(State.RESTING)
    before = rig.moved_rad
    rig.go(1.0)
    assert rig.moved_rad - before < 1e-3


@pytest.mark.parametrize("state", WAYS_IN)
@pytest.mark.parametrize("method", ALLOWED)
def test_each_request_in_each_state_is_taken_or_refused_with_a_next_step(method: str, state: str) -> None:
    rig = in_state(state)
    rig.go(0.0)
    params: dict[str, dict[str, Any]] = {
        "walk": {"vx": 0.1},
        "gait": {"name": juniper().gaits[0].name},
        "posture": {"roll_rad": 0.05},
        "route": {"steps": [{"forward_mm": 50}]},
    }
    if state in ALLOWED[method]:
        assert rig.ask(method, **params.get(method, {})) == {"state": rig.state, "goal": rig.machine.goal}
    else:
        with pytest.raises(StateError) as caught:
            rig.ask(method, **params.get(method, {}))
        assert NEXT[State(state)] in str(caught.value)
    rig.go(1.0)
    for before, after in pairwise(rig.states):
        assert after in TRANSITIONS[before]


@pytest.mark.parametrize("state", WAYS_IN)
def test_every_end_is_off_or_at_rest(state: str) -> None:
    rig = in_state(state)
    if State(state) not in LATCHED:
        rig.machine.power_down()
    rig.go(8.0)
    assert rig.state in (State.OFF, State.STOPPED)
    assert rig.frame is not None
    assert rig.frame.release


def test_walk_is_refused_while_the_robot_is_on_its_way_down() -> None:
    rig = in_state("walking")
    rig.ask("rest")
    with pytest.raises(StateError, match="stand"):
        rig.ask("walk", vx=0.1)


def test_one_commander_at_a_time_and_others_are_told_who() -> None:
    rig = in_state("walking")
    with pytest.raises(CommanderError, match="client 1 commands the robot"):
        rig.ask("walk", client=2, vx=0.1)
    with pytest.raises(CommanderError):
        rig.ask("rest", client=2)
    rig.ask("state", client=2)
    rig.ask("describe", client=2)
    rig.ask("stop", client=2)
    rig.expect(State.STOPPING)


def test_the_claim_lapses_with_its_time_to_live() -> None:
    rig = in_state("standing")
    rig.ask("walk", vx=0.05, ttl_s=0.3)
    rig.go(0.29)
    with pytest.raises(CommanderError):
        rig.ask("stand", client=2)
    rig.go(0.02)
    rig.ask("stand", client=2)


def test_the_claim_goes_with_its_client() -> None:
    rig = in_state("walking")
    rig.machine.client_gone(1, rig.now_s)
    rig.ask("stand", client=2)


def test_whoever_cancels_a_route_ends_its_claim_too() -> None:
    rig = in_state("standing")
    rig.ask("route", steps=[{"forward_mm": 500}])
    rig.go(2.0)
    with pytest.raises(CommanderError):
        rig.ask("rest", client=2)
    rig.ask("route", client=2, cancel=True)
    rig.ask("rest", client=3)
    rig.until(State.RESTING)


def test_wrong_values_are_command_errors() -> None:
    rig = in_state("standing")
    with pytest.raises(CommandError, match="gait"):
        rig.ask("gait", name="gallop")
    with pytest.raises(CommandError, match="height_m"):
        rig.ask("posture", height_m=9.0)
    with pytest.raises(CommandError, match="no request"):
        rig.machine.request("dance", {}, 1, rig.now_s)
    with pytest.raises(CommandError, match="vx"):
        rig.machine.request("walk", ["fast"], 1, rig.now_s)


def test_parameters_by_position() -> None:
    rig = in_state("standing")
    rig.machine.request("walk", [0.1, 0.0, 0.2], 1, rig.now_s)
    assert rig.machine.command is not None
    assert (rig.machine.command.vx, rig.machine.command.yaw_rate) == (0.1, 0.2)


def test_posture_and_gait_reach_the_controller() -> None:
    rig = in_state("standing")
    rig.ask("posture", height_m=0.14)
    rig.ask("gait", name=juniper().gaits[1].name)
    rig.go(3.0)
    assert rig.frame is not None
    assert rig.frame.tick is not None
    assert rig.frame.tick.height_m == pytest.approx(0.14, abs=1e-3)
    assert rig.frame.tick.gait == juniper().gaits[1].name


def test_waking_waits_for_the_boards() -> None:
    rig = Rig(juniper())
    rig.machine.wake_blocked = "the boards are being set up"
    rig.ask("stand")
    rig.go(1.0)
    rig.expect(State.OFF)
    rig.machine.wake_blocked = ""
    rig.until(State.STANDING)


def test_nothing_moves_while_a_frame_is_still_on_its_way() -> None:
    rig = in_state("walking")
    held = rig.frame
    assert held is not None
    for _ in range(20):
        frame = rig.tick(advance=False)
        assert frame.pulses_us == held.pulses_us
    rig.tick()  # the rig checks that this step is no larger than any other
    assert rig.frame is not None
    assert rig.frame.pulses_us != held.pulses_us


def test_closing_refuses_every_request_to_move() -> None:
    rig = in_state("walking")
    rig.machine.power_down("SIGTERM")
    for method in ("stand", "rest", "off"):
        with pytest.raises(StateError, match="SIGTERM"):
            rig.ask(method)
    rig.until(State.OFF, 10.0)
    with pytest.raises(StateError):
        rig.ask("stand")


def test_snapshot_has_what_clients_are_promised() -> None:
    rig = in_state("walking")
    told = rig.machine.snapshot(rig.now_s)
    assert set(told) >= {
        "robot", "state", "since_s", "gait", "pose", "velocity", "command", "slowdown", "stance", "feet_m",
        "height_m", "faults", "first_cause", "stop", "counters", "supply_v", "route", "uptime_s", "digest",
    }  # fmt: skip
    assert told["command"] == {
        "vx_m_s": 0.15, "vy_m_s": 0.0, "yaw_rate_rad_s": 0.0, "age_s": 1.5, "ttl_s": 10.0, "holder": 1,
    }  # fmt: skip
    assert told["state"] == "walking"
