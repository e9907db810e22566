"""Stops and lost commanders, on an injected clock: categories of IEC 60204-1, the latch of ISO 13850."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from hobnail.errors import FaultError, StateError, StoppedError
from hobnail.robot import Robot
from hobnail.service.states import State
from machine_rig import WAYS_IN, Rig, in_state
from robots import bramble, juniper

ROBOTS = pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
MOVING_REQUESTS: dict[str, dict[str, Any]] = {
    "walk": {"vx": 0.1},
    "stand": {},
    "rest": {},
    "off": {},
    "posture": {"roll_rad": 0.0},
    "gait": {"name": juniper().gaits[0].name},
    "route": {"steps": [{"forward_mm": 50}]},
}


@pytest.mark.parametrize("state", WAYS_IN)
def test_category_0_cuts_every_pulse_in_the_next_frame(state: str) -> None:
    rig = in_state(state)
    rig.ask("stop", client=9, category=0)
    frame = rig.tick()
    assert frame.state is State.STOPPED
    assert frame.release
    assert all(pulse is None for pulse in frame.pulses_us)


def test_category_0_tells_the_bus_before_the_next_tick() -> None:
    rig = in_state("walking")
    cuts: list[float] = []
    rig.machine.on_cut = lambda: cuts.append(rig.now_s)
    rig.ask("stop", category=0)
    assert cuts == [rig.now_s]


@ROBOTS
@pytest.mark.parametrize("state", WAYS_IN)
def test_category_1_ends_without_pulses_within_the_set_time(state: str, robot: Robot) -> None:
    rig = in_state(state, robot)
    began_s = rig.now_s if state != "stopping" else rig.machine.stop_record.since_s  # type: ignore[union-attr]
    rig.ask("stop", client=9, category=1)
    rig.tick()
    rig.until(State.STOPPED, robot.safety.crouch_s + robot.period_s)
    assert rig.now_s - began_s <= robot.safety.crouch_s + robot.period_s
    assert rig.frame is not None
    assert rig.frame.release


@ROBOTS
@pytest.mark.parametrize("vx", [0.0, 0.15, -0.15])
def test_category_1_plants_every_foot_and_lies_low_before_it_cuts(robot: Robot, vx: float) -> None:
    rig = Rig(robot)
    rig.walk(vx)
    rig.ask("stop", category=1)
    last = rig.frame
    while rig.state is State.STOPPING:
        frame = rig.tick()
        if not frame.release:
            last = frame
    assert last is not None
    assert last.tick is not None
    assert all(last.tick.stance)
    # It is cut because it is down and still, not because the time has run out.
    assert rig.frame is not None
    assert rig.frame.tick is not None
    assert rig.frame.tick.settled
    stance = robot.stance
    assert last.tick.height_m - stance.rest_height_m < 0.1 * (stance.height_m - stance.rest_height_m)


def test_a_crouch_that_is_not_done_in_time_is_cut_all_the_same() -> None:
    robot = juniper()
    rig = Rig(replace(robot, safety=replace(robot.safety, crouch_s=0.2)))
    rig.walk()
    rig.ask("stop", category=1)
    assert rig.until(State.STOPPED) <= 0.2 + robot.period_s + 1e-9


def test_a_crouch_is_cut_in_time_even_when_the_bus_hangs() -> None:
    rig = in_state("walking")
    rig.ask("stop", category=1)
    for _ in range(160):
        frame = rig.tick(advance=False)
    assert frame.state is State.STOPPED
    assert frame.release


def test_category_0_overrides_a_category_1_that_is_under_way() -> None:
    rig = in_state("walking")
    rig.ask("stop", category=1, reason="gate open")
    rig.go(0.2)
    rig.ask("stop", client=2, category=0, reason="falling")
    assert rig.tick().state is State.STOPPED
    stop = rig.machine.snapshot(rig.now_s)["stop"]
    # The first cause is kept, in the graver category.
    assert stop == {"latched": True, "category": 0, "reason": "gate open (client 1)"}


def test_a_second_category_1_does_not_lengthen_the_first() -> None:
    rig = in_state("walking")
    rig.ask("stop", category=1)
    rig.go(1.0)
    rig.ask("stop", category=1)
    assert rig.until(State.STOPPED) <= 0.5 + juniper().period_s + 1e-9


@pytest.mark.parametrize("method", MOVING_REQUESTS)
@pytest.mark.parametrize("state", ["stopping", "stopped"])
def test_a_latched_stop_refuses_everything_that_moves(state: str, method: str) -> None:
    rig = in_state(state)
    with pytest.raises(StoppedError, match="reset"):
        rig.ask(method, **MOVING_REQUESTS[method])


def test_reset_waits_until_the_stop_is_over() -> None:
    rig = in_state("stopping")
    with pytest.raises(StateError, match="under way"):
        rig.ask("reset")
    rig.expect(State.STOPPING)


def test_reset_moves_nothing_and_needs_a_wake_and_a_command() -> None:
    rig = in_state("stopped")
    rig.ask("reset", client=5)
    rig.go(2.0)
    rig.expect(State.OFF)
    assert rig.frame is not None
    assert rig.frame.release
    with pytest.raises(StateError, match="stand"):
        rig.ask("walk", vx=0.1)
    rig.go(1.0)
    rig.ask("stand")
    rig.until(State.STANDING)
    rig.go(1.0)
    rig.expect(State.STANDING)  # nobody walks until asked
    rig.ask("walk", vx=0.1)
    rig.go(0.3)
    rig.expect(State.WALKING)


def test_reset_asks_for_the_boards_to_be_set_up_again() -> None:
    rig = in_state("stopped")
    before = rig.machine.setups
    rig.ask("reset")
    assert rig.tick().setup == before + 1


def test_a_command_held_down_through_the_stop_is_not_a_fresh_one() -> None:
    rig = in_state("standing")
    refused: list[StateError] = []

    def hold() -> None:
        try:
            rig.ask("walk", client=7, vx=0.1)
        except StateError as error:
            refused.append(error)

    rig.go(2.0, hold)
    rig.expect(State.WALKING)
    assert not refused
    rig.ask("stop", client=2, category=0)
    rig.go(1.0, hold)
    rig.ask("reset", client=2)
    rig.go(1.0, hold)
    rig.ask("stand", client=2)
    rig.go(8.0, hold)
    rig.expect(State.STANDING)
    assert "let go" in str(refused[-1])
    # Letting go: zero, and then the same stick again.
    rig.ask("walk", client=7)
    rig.go(1.0, hold)
    rig.expect(State.WALKING)


def test_a_pause_longer_than_the_time_to_live_is_letting_go() -> None:
    rig = in_state("walking")
    rig.ask("stop", client=2, category=0)
    rig.ask("reset", client=2)
    with pytest.raises(StateError):
        rig.ask("walk", vx=0.1)
    rig.ask("stand", client=2)
    rig.until(State.STANDING)
    rig.ask("walk", vx=0.1)


def test_a_stick_held_down_since_before_the_wake_is_not_a_fresh_command() -> None:
    """There was no stop: it was held down while the robot was off."""
    rig = in_state("off")
    refused: list[StateError] = []

    def hold() -> None:
        with pytest.raises(StateError) as caught:
            rig.ask("walk", client=7, vx=0.1)
        refused.append(caught.value)

    rig.go(0.5, hold)
    rig.ask("stand", client=2)
    rig.go(8.0, hold)
    rig.expect(State.STANDING)
    assert "let go" in str(refused[-1])


def test_a_long_command_from_before_the_stop_is_not_renewed_after_it() -> None:
    """Its client was silent throughout, but its time to live is not over."""
    rig = in_state("standing")
    rig.ask("walk", client=7, vx=0.1, ttl_s=60.0)
    rig.until(State.WALKING)
    rig.ask("stop", client=2, category=0)
    rig.ask("reset", client=2)
    rig.tick()
    rig.ask("stand", client=2)
    rig.until(State.STANDING)
    with pytest.raises(StateError, match="let go"):
        rig.ask("walk", client=7, vx=0.1, ttl_s=60.0)
    rig.ask("walk", client=7)
    rig.ask("walk", client=7, vx=0.1)


@pytest.mark.parametrize("state", WAYS_IN)
def test_stop_latches_in_every_state_off_included(state: str) -> None:
    rig = in_state(state)
    rig.ask("stop", client=3)
    rig.go(2.0)
    rig.expect(State.STOPPED)
    with pytest.raises(StoppedError):
        rig.ask("stand")


def test_each_stop_action_is_guarded_by_itself(monkeypatch: pytest.MonkeyPatch) -> None:
    rig = in_state("walking")

    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("planted")

    monkeypatch.setattr(rig.machine.controller, "stand", broken)
    monkeypatch.setattr(rig.machine.controller, "lower", broken)
    rig.ask("stop", category=1)
    # It cannot be lowered, so it is cut; the claim is gone all the same, and it is told.
    assert rig.tick().release
    assert rig.machine.commander.holder(rig.now_s) is None
    assert rig.machine.faults.is_latched("internal")


def test_pulses_are_cut_even_when_telling_the_bus_fails() -> None:
    rig = in_state("walking")

    def broken() -> None:
        raise OSError("planted")

    rig.machine.on_cut = broken
    rig.ask("stop", category=0)
    assert rig.tick().release
    assert rig.machine.faults.is_latched("internal")


def test_zero_speed_within_the_time_to_live_plus_one_step() -> None:
    robot = juniper()
    rig = Rig(robot)
    rig.stand()
    rig.ask("walk", vx=0.2, ttl_s=0.5)
    rig.go(0.4)
    assert rig.machine.command is not None
    rig.go(0.11)
    assert rig.machine.command is None
    assert rig.machine.faults.is_latched("commander-lost")
    # The command is zero now, in the middle of speeding up.  The body turns that round and
    # slows along a cubic, whose peak is 1.5 times its mean slope, with the certified
    # acceleration: one step of the walk.
    rig.go(1.5 * 1.42 * 0.2 / robot.envelope.acceleration_m_s2 + 2 * robot.period_s)
    assert rig.frame is not None
    assert rig.frame.tick is not None
    assert rig.frame.tick.velocity == pytest.approx((0.0, 0.0, 0.0), abs=1e-9)
    rig.until(State.STANDING, 3.0)


def test_commander_lost_leads_to_rest_and_then_to_off() -> None:
    robot = juniper()
    rig = Rig(robot)
    rig.walk()
    rig.go(10.0)
    rig.until(State.STANDING)
    # 10 s of time-to-live began with the command, 1.5 s before.
    rig.go(robot.safety.lost_rest_s - 3.0)
    rig.expect(State.STANDING)
    rig.until(State.RESTING, 8.0)
    rig.until(State.OFF, robot.safety.idle_rest_s)


def test_commander_lost_is_over_with_a_fresh_command() -> None:
    rig = in_state("standing")
    rig.ask("walk", vx=0.1)
    rig.go(1.0)
    assert rig.machine.faults.is_latched("commander-lost")
    rig.ask("walk", client=2, vx=0.1)
    assert not rig.machine.faults.is_latched("commander-lost")
    rig.go(0.1)
    rig.expect(State.WALKING)
    rig.ask("stand", client=2)
    rig.go(juniper().safety.lost_rest_s + 5.0)
    rig.expect(State.STANDING)


def test_a_client_that_goes_away_stops_its_walk_at_once() -> None:
    rig = in_state("walking")
    rig.machine.client_gone(1, rig.now_s)
    assert rig.machine.command is None
    assert rig.machine.faults.is_latched("commander-lost")
    rig.until(State.STANDING, 3.0)


def test_standing_idle_leads_to_rest_then_off() -> None:
    rig = in_state("standing")
    idle_s = juniper().safety.idle_rest_s
    rig.go(idle_s - 10.0)
    rig.expect(State.STANDING)
    rig.until(State.OFF, 20.0)
    assert rig.states[-3:] == [State.LOWERING, State.RESTING, State.OFF]


def test_zero_commands_do_not_keep_an_idle_robot_standing() -> None:
    robot = juniper()
    rig = Rig(replace(robot, safety=replace(robot.safety, idle_rest_s=5.0)))
    rig.stand()

    def stream() -> None:
        if rig.state is State.STANDING and rig.machine.goal is State.STANDING:
            rig.ask("walk")

    rig.go(12.0, stream)
    rig.expect(State.OFF)


def test_walking_is_not_idle() -> None:
    robot = juniper()
    rig = Rig(replace(robot, safety=replace(robot.safety, idle_rest_s=3.0)))
    rig.stand()
    rig.go(10.0, lambda: rig.ask("walk", vx=0.1))
    rig.expect(State.WALKING)


def test_reset_is_refused_while_the_cause_of_the_stop_lasts() -> None:
    rig = in_state("walking")
    rig.machine.report("stop-input", rig.now_s, "gpiochip0 line 4 is open", lasting=True)
    rig.expect(State.STOPPING)
    rig.until(State.STOPPED)
    with pytest.raises(FaultError, match="switch"):
        rig.ask("reset")
    rig.machine.faults.over("stop-input", rig.now_s)
    rig.go(1.0)
    rig.expect(State.STOPPED)  # a stop released is no reason to move, or even to unlatch
    rig.ask("reset")
    rig.expect(State.OFF)
