"""Every fault that the program knows: what it does, by a table of our own, and that it tells what to do.

warn   told; work goes on           hold   feet planted, stands
rest   lies down, then off          stop   category 1, latched
cut    category 0, latched
"""

from __future__ import annotations

from campaign.acts import (
    LATCHED,
    end,
    expect_fault,
    expect_stopped,
    prove_latched,
    refused,
    robot_in,
    silent,
    still_once_eased,
)
from campaign.world import World
from hobnail.service.faults import KINDS

EFFECTS = {
    "commander-lost": "hold",
    "bus-retried": "warn",
    "bus-behind": "warn",
    "bus-error": "cut",
    "bus-stalled": "cut",
    "settings-lost": "cut",
    "tick-overrun": "warn",
    "joint-clamped": "hold",
    "out-of-reach": "warn",
    "client-flood": "warn",
    "recorder-behind": "warn",
    "supply-low": "rest",
    "supply-unread": "warn",
    "overload": "warn",
    "configuration-changed": "warn",
    "stop-input": "stop",
    "route-failed": "warn",
    "internal": "cut",
}


def each_fault(state: str) -> str:
    """Each fault by itself; the warnings all at once."""
    assert set(EFFECTS) == set(KINDS), f"faults without a row here: {sorted(set(KINDS) ^ set(EFFECTS))}"
    warnings = [name for name, effect in EFFECTS.items() if effect == "warn"]
    with robot_in(state) as world:
        for name in warnings:
            _report(world, name)
        world.run(0.3)
        for name in warnings:
            expect_fault(world, name, cause=False)
        if state == "walking":
            assert world.told()["command"]["vx_m_s"] > 0.0, "a warning ended the walk"
        assert (world.state == "stopped") == (state == "stopped"), f"{world.state} after warnings"
        end(world)
    for name, effect in EFFECTS.items():
        if effect != "warn":
            with robot_in(state) as world:
                _report(world, name)
                _JUDGES[effect](world, state, name)
                end(world)
    return f"{len(EFFECTS)} faults graded as they should be, each with its next action"


def _report(world: World, name: str) -> None:
    world.machine.report(name, world.clock.now_s, "injected")
    world.bus.settle()


def _held(world: World, state: str, name: str) -> None:
    """Nothing but a walk is ended by it."""
    expect_fault(world, name, cause=state not in LATCHED)
    if state == "walking":
        world.until("standing", 3.0)
        still_once_eased(world, 0.3)
    else:
        world.run(0.3)
        assert (world.state == "stopped") == (state == "stopped")


def _rested(world: World, state: str, name: str) -> None:
    """Down and off, unless a stop is on already; no waking while it lasts."""
    expect_fault(world, name, cause=state not in LATCHED)
    if state not in LATCHED:
        world.until("off", 10.0)
        silent(world, 0.1)
        refused(world, "stand", "battery")


def _stopped(world: World, state: str, name: str) -> None:
    world.loop.run(lambda: world.state == "stopped" or world.clock.now_s > 1100.0)
    expect_stopped(world, state, name)


def _cut(world: World, state: str, name: str) -> None:
    world.run(world.robot.period_s)
    assert world.witness.all_full_off(), f"pulses go on after {name}"
    expect_stopped(world, state, name)
    if name == "internal":  # the others have rows of their own, with their true causes
        prove_latched(world)


_JUDGES = {"hold": _held, "rest": _rested, "stop": _stopped, "cut": _cut}
