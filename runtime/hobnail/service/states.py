"""The states of the running robot and what each allows, as data; times in s on the monotonic clock.

Does nothing: `hobnail.service.machine` acts by these tables.

    off -> waking -> resting -> rising -> standing <-> walking
     ^                  ^ |                  |           |
     |                  | `---- off          v           v
     |                  `----------------- lowering <----'
     `-- stopped <- stopping <- anywhere        (category 1)
            ^------------------ anywhere        (category 0)
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum
from typing import TYPE_CHECKING, NamedTuple

if TYPE_CHECKING:
    from hobnail.controller import Tick


LOCAL_CLIENT = 0  # the service's own errand, as `run --route` has one; sockets count from 1


class State(StrEnum):
    """Where the robot is between no pulses and walking."""

    OFF = "off"
    WAKING = "waking"
    RESTING = "resting"
    RISING = "rising"
    STANDING = "standing"
    WALKING = "walking"
    LOWERING = "lowering"
    STOPPING = "stopping"
    STOPPED = "stopped"


TRANSITIONS: dict[State, frozenset[State]] = {
    State.OFF: frozenset({State.WAKING, State.STOPPED}),
    State.WAKING: frozenset({State.RESTING, State.OFF, State.STOPPING, State.STOPPED}),
    State.RESTING: frozenset({State.RISING, State.OFF, State.STOPPED}),
    State.RISING: frozenset({State.STANDING, State.LOWERING, State.STOPPING, State.STOPPED}),
    State.STANDING: frozenset({State.WALKING, State.LOWERING, State.STOPPING, State.STOPPED}),
    State.WALKING: frozenset({State.STANDING, State.LOWERING, State.STOPPING, State.STOPPED}),
    State.LOWERING: frozenset({State.RESTING, State.RISING, State.STOPPING, State.STOPPED}),
    State.STOPPING: frozenset({State.STOPPED}),
    State.STOPPED: frozenset({State.OFF}),
}

# Where the controller carries the body, so that a category 1 stop has something to lower.
CARRYING = frozenset({State.RISING, State.STANDING, State.WALKING, State.LOWERING})
ON_FEET = frozenset({State.STANDING, State.WALKING})
STILL = frozenset({State.OFF, State.RESTING, State.STANDING})
NO_PULSES = frozenset({State.OFF, State.STOPPED})
LYING = NO_PULSES | {State.WAKING, State.RESTING}  # the belly carries the weight, not the servos
LATCHED = frozenset({State.STOPPING, State.STOPPED})

_ANY_UNLATCHED = frozenset(State) - LATCHED

# The states in which a request is taken.  `stop`, `reset`, `state` and `describe` are taken in all.
ALLOWED: dict[str, frozenset[State]] = {
    "walk": ON_FEET,
    "route": ON_FEET,
    "posture": ON_FEET,
    "gait": frozenset({State.RESTING}) | CARRYING,
    "stand": _ANY_UNLATCHED,
    "rest": _ANY_UNLATCHED,
    "off": _ANY_UNLATCHED,
}

# What to do about a request that the state does not allow.
NEXT: dict[State, str] = {
    State.OFF: "send `stand` first",
    State.WAKING: "the joints are waking: send `stand`, and wait until it stands",
    State.RESTING: "send `stand` first",
    State.RISING: "wait until it stands",
    State.STANDING: "",
    State.WALKING: "",
    State.LOWERING: "send `stand` to rise again",
    State.STOPPING: "wait until it has stopped, then `reset`, then `stand`",
    State.STOPPED: "look at the robot, then `reset`, then `stand`",
}


class Passage(NamedTuple):
    """A change of state, and its reason where nobody asked for it, or it belongs to a stop."""

    before: State
    after: State
    reason: str


class Frame(NamedTuple):
    """What one tick hands to the bus.

    `pulses_us` is flat, in the order of `Robot.joints`, None for no signal;
    `release` True: every pulse ends now, whatever `pulses_us` says.
    `joints_rad` are the commanded angles behind the pulses, None where the
    joint is not awake.  `setup` counts how often the boards were to be set up again.
    """

    state: State
    pulses_us: tuple[float | None, ...]
    release: bool
    joints_rad: tuple[float | None, ...]
    setup: int
    tick: Tick | None


@dataclass(frozen=True, slots=True)
class Command:
    """A walk command: body velocity (m/s, rad/s) at `pivot` (m), and how long it holds (s)."""

    vx: float
    vy: float
    yaw_rate: float
    pivot: tuple[float, float]
    received_s: float
    ttl_s: float
    client_id: int

    @property
    def moves(self) -> bool:
        """Not a command to stand still."""
        return bool(self.vx or self.vy or self.yaw_rate)


@dataclass(frozen=True, slots=True)
class Stop:
    """A latched stop: its IEC 60204-1 category, why, and when it began and has to be over."""

    category: int
    reason: str
    since_s: float
    until_s: float

    def graver(self, category: int) -> Stop:
        """The same stop, in another category."""
        return replace(self, category=category)
