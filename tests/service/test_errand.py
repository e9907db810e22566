"""A route that the service walks by itself, on an injected clock."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import pytest

from hobnail.service.errand import Errand
from hobnail.service.route_steps import Move, Pose, Step, Wait
from hobnail.service.states import State
from machine_rig import Rig
from robots import juniper

STEPS: tuple[Step, ...] = (Move(twist=(0.1, 0.0, 0.0)), Wait(duration_s=0.5))


def run(
    steps: tuple[Step, ...], at: dict[float, Callable[[Rig], object]] | None = None
) -> tuple[Rig, Errand]:
    """Walk an errand to its end; `at` are things to happen, so many seconds after the start."""
    rig, errand = Rig(juniper()), Errand(steps)
    began_s = rig.now_s
    events = sorted((at or {}).items())

    def each() -> None:
        if events and rig.now_s - began_s >= events[0][0]:
            events.pop(0)[1](rig)
        errand.update(rig.machine, rig.now_s)

    for _ in range(100):
        rig.go(1.0, each)
        if rig.machine.closing and rig.state in (State.OFF, State.STOPPED):
            return rig, errand
    raise AssertionError(f"still {rig.state}")


def test_it_stands_walks_lies_down_and_goes_off() -> None:
    rig, errand = run(STEPS)
    assert errand.exit_code == 0
    assert rig.states[0] == rig.states[-1] == State.OFF
    assert rig.states[-5:] == [State.WALKING, State.STANDING, State.LOWERING, State.RESTING, State.OFF]
    assert rig.machine.closing == "the route is walked"
    assert rig.machine.route is not None
    assert rig.machine.route.done


@pytest.mark.parametrize("category", [0, 1])
def test_a_stop_ends_it_with_another_code(category: int) -> None:
    rig, errand = run(STEPS, {5.0: lambda rig: rig.ask("stop", category=category)})
    assert errand.exit_code == 75
    rig.expect(State.STOPPED)


@pytest.mark.parametrize("after_s", [0.05, 2.0, 5.0])
def test_a_stop_that_is_reset_before_the_next_tick_ends_it_as_well(after_s: float) -> None:
    def stop_and_reset(rig: Rig) -> None:
        rig.ask("stop", category=0)
        rig.ask("reset")

    rig, errand = run(STEPS, {after_s: stop_and_reset})
    assert errand.exit_code == 75
    assert rig.machine.closing in ("the route was stopped", "the route was given up")
    rig.expect(State.OFF)


def test_a_route_that_does_not_fit_is_not_walked() -> None:
    rig, errand = run((Pose(height_m=5.0),))
    assert errand.exit_code == 75
    assert "height" in rig.machine.closing
    rig.expect(State.OFF)


def test_low_supply_ends_it_at_rest() -> None:
    rig, errand = run(STEPS, {5.0: lambda rig: rig.machine.report("supply-low", rig.now_s)})
    assert errand.exit_code == 75
    assert rig.states[-2:] == [State.RESTING, State.OFF]


def test_others_cannot_command_while_it_walks_but_may_stop() -> None:
    refused: list[Exception] = []

    def interfere(rig: Rig) -> None:
        for method in ("walk", "stand", "posture"):
            try:
                rig.ask(method, client=4)
            except Exception as error:  # noqa: BLE001 -- looked at below
                refused.append(error)

    _, errand = run(STEPS, {5.0: interfere})
    assert len(refused) == 3
    assert errand.exit_code == 0


def test_it_waits_for_the_boards() -> None:
    rig, errand = Rig(juniper()), Errand(STEPS)
    rig.machine.wake_blocked = "the boards are being set up"
    rig.go(1.0, lambda: errand.update(rig.machine, rig.now_s))
    rig.expect(State.OFF)
    assert rig.machine.goal is State.OFF


def test_idle_time_does_not_end_a_long_wait_on_a_route() -> None:
    robot = replace(juniper(), safety=replace(juniper().safety, idle_rest_s=2.0))
    rig, errand = Rig(robot), Errand((Wait(duration_s=20.0), Move(twist=(0.05, 0.0, 0.0))))
    rig.go(40.0, lambda: errand.update(rig.machine, rig.now_s))
    assert errand.exit_code == 0
