"""What scenarios have in common: ways into a state, what must hold at a latched stop, how everything ends.

Checks look at the pins through the world's witness; what the program says of
itself is believed only where what it tells people is the point.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from campaign.world import World, brisk, demo
from hobnail.errors import HobnailError
from hobnail.robot import Robot

SPEED_M_S = 0.15
EASE_S = 0.3  # after the last foot is down, for the body to come back over its feet
MOVING: dict[str, dict[str, object]] = {
    "walk": {"vx": SPEED_M_S},
    "stand": {},
    "rest": {},
    "posture": {"roll_rad": 0.05},
    "gait": {"name": "any"},
    "route": {"steps": [{"forward_mm": 50}]},
}
PULSING = frozenset({"waking", "resting", "rising", "standing", "walking", "lowering", "stopping"})
LATCHED = frozenset({"stopping", "stopped"})


def walk(world: World, client: int = 1, **params: object) -> None:
    """Stand and get into a steady walk."""
    if world.state not in ("standing", "walking"):
        world.ask("stand", client)
        world.until("standing", 20.0)
    world.ask("walk", client, **{"vx": SPEED_M_S, "ttl_s": 10.0, **params})
    world.run(0.8)


def _lower(world: World) -> None:
    world.ask("stand")
    world.until("standing", 20.0)
    world.ask("rest")
    world.run(0.2)


def _rise(world: World) -> None:
    world.ask("stand")
    world.until("rising", 20.0)
    world.run(0.2)


def _rest(world: World) -> None:
    world.ask("rest")
    world.until("resting", 20.0)


def _stand(world: World) -> None:
    world.ask("stand")
    world.until("standing", 20.0)


def _wake(world: World) -> None:
    world.ask("stand")
    world.run(5.5 * world.robot.safety.wake_interval_s)


def _stop(category: int) -> Callable[[World], None]:
    def stop(world: World) -> None:
        walk(world)
        world.ask("stop", category=category, reason="the way in")
        world.run(0.3)

    return stop


WAYS_IN: dict[str, Callable[[World], None]] = {
    "off": lambda world: world.run(0.1),
    "waking": _wake,
    "resting": _rest,
    "rising": _rise,
    "standing": _stand,
    "walking": walk,
    "lowering": _lower,
    "stopping": _stop(1),
    "stopped": _stop(0),
}


@contextmanager
def robot_in(
    state: str, robot: Robot | None = None, *, may_cut: bool = False, **parts: Any
) -> Iterator[World]:
    """A robot brought into a state by requests alone; at the end, the witness's word."""
    world = World(robot or brisk(demo()), **parts)
    world.witness.may_cut = may_cut
    try:
        WAYS_IN[state](world)
        assert world.state == state, f"the way into {state} led to {world.state}"
        heed(world)
        yield world
        heed(world)
        assert world.witness.missed == 0, f"{world.witness.missed} ticks were missed"
    finally:
        world.close()


def heed(world: World) -> None:
    """Fail with what the witness saw."""
    world.witness.look()
    assert not world.witness.problems, "; ".join(world.witness.problems)


def refused(world: World, method: str, word: str, client: int = 1) -> None:
    """The request must be refused, with that word in what the user is told."""
    try:
        world.ask(method, client, **MOVING.get(method, {}))
    except HobnailError as error:
        said = str(error)
    else:
        raise AssertionError(f"{method} was taken")
    assert word in said, f"{method} is refused without a word of {word!r}: {said}"


def expect_fault(world: World, name: str, *, cause: bool = True) -> None:
    """That fault is told with its next action; `cause`: it is told as the first cause of a stop.

    A stop that was latched before keeps its own reason.
    """
    told = world.told()
    faults = {fault["name"]: fault for fault in told["faults"]}
    assert name in faults, f"{name} is not told; told are {', '.join(faults) or 'none'}"
    assert len(faults[name]["next"]) > 10, f"{name} names no next action"
    if cause:
        assert name in str(told["first_cause"]), f"first cause is {told['first_cause']!r}, not {name}"


def first_cause(state: str, fault: str) -> str:
    """What must be kept as the first cause when that fault comes in that state."""
    return "the way in" if state in LATCHED else fault


def expect_stopped(world: World, state: str, fault: str) -> None:
    """Stopped and latched, with the right first cause."""
    assert world.state == "stopped", f"{world.state}, wanted stopped"
    expect_fault(world, fault, cause=False)
    told = world.told()
    wanted = first_cause(state, fault)
    assert wanted in str(told["first_cause"]), f"first cause is {told['first_cause']!r}, wanted {wanted}"
    assert told["stop"]["latched"], "the stop is not latched"


def silent(world: World, seconds: float) -> None:
    """No pulse on any pin for so long, once the last one has ended."""
    world.run(world.robot.period_s)
    world.witness.mark()
    world.run(seconds)
    world.witness.look()
    assert world.witness.pulsing == 0, f"{world.witness.pulsing} outputs pulse"
    assert world.witness.pulses == 0, f"{world.witness.pulses} pulses were seen"


def still(world: World, seconds: float) -> None:
    """Every servo keeps its place for so long."""
    world.witness.mark()
    world.run(seconds)
    world.witness.look()
    moved_us = world.witness.moved_us
    assert moved_us == 0.0, f"the servos moved by {moved_us:.1f} us in all"


def still_once_eased(world: World, seconds: float) -> None:
    """The same, after the time in which the body comes back over its feet, once the last is down."""
    world.run(EASE_S)
    still(world, seconds)


def moves(world: World, seconds: float) -> None:
    """Some servo moves."""
    world.witness.mark()
    world.run(seconds)
    world.witness.look()
    assert world.witness.moved_us > 10.0, "nothing moves"


def prove_latched(world: World) -> None:
    """Nothing moves without a reset, then a wake, then a command, each of them fresh."""
    assert world.state == "stopped", f"{world.state}, wanted stopped"
    silent(world, 0.1)
    for method in MOVING:
        refused(world, method, "reset")
    silent(world, 0.4)
    world.ask("reset")
    silent(world, 0.3)
    assert world.state == "off", f"{world.state} after the reset, wanted off"
    refused(world, "walk", "stand")
    silent(world, 0.2)
    world.ask("stand")
    world.until("standing", 20.0)
    still(world, 0.3)
    world.ask("walk", vx=SPEED_M_S)
    moves(world, 0.4)


def end(world: World) -> str:
    """Power down, as at the end of the service: every channel is full off, however it was before."""
    world.machine.power_down("the scenario is over")
    world.loop.run(lambda: world.state in ("off", "stopped"))
    world.run(0.1)
    assert world.witness.all_full_off(), "a channel is not full off at the end"
    silent(world, 0.1)
    return world.state
