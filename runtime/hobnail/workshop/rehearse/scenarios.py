"""What a rehearsal commands and when: built-in scenarios for any robot; m/s, rad/s, s, body frame.

A scenario is a list of timed commands.  Speeds are shares of the robot's
certified envelope, so that one list suits every robot.  Nothing here runs
anything (`runner` does) or reads a file (`script` does).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from hobnail.controller import Controller
from hobnail.errors import CommandError
from hobnail.motion.planar import to_origin
from hobnail.robot import Robot, Vec2, Vec3

SETTLE_S = 0.5  # stands before the first command
WALK_S = 5.0
LAST_CYCLES = 4  # of the slowest cycle that a gait allows: what a measured stretch holds at least


@dataclass(frozen=True, slots=True, kw_only=True)
class Command:
    """At `at_s`, `apply` is called with the controller; without `apply` all pulses end.

    `twist` is the velocity at the body origin asked for from then on, None when
    the command does not change it.  `posed` is True while roll or pitch are asked for.
    """

    at_s: float
    text: str
    apply: Callable[[Controller], None] | None
    twist: Vec3 | None = None
    posed: bool | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    """`commands` in the order of time, and how long it lasts.  `gait` None: the robot's first."""

    name: str
    about: str
    commands: tuple[Command, ...]
    duration_s: float
    gait: str | None = None


def walk(at_s: float, vx: float, vy: float, yaw_rate: float, pivot: Vec2 = (0.0, 0.0)) -> Command:
    """Walk with the velocity (vx, vy) of the point `pivot`, turning."""
    twist = to_origin(vx, vy, yaw_rate, pivot)
    about = f" about ({pivot[0]:g}, {pivot[1]:g}) m" if any(pivot) else ""
    return Command(
        at_s=at_s,
        text=f"walk {vx:g}, {vy:g} m/s, {yaw_rate:g} rad/s{about}",
        apply=lambda controller: controller.walk(vx, vy, yaw_rate, pivot),
        twist=twist,
    )


def stand(at_s: float) -> Command:
    """Come to a stand."""
    return Command(
        at_s=at_s, text="stand", apply=lambda controller: controller.stand(), twist=(0.0, 0.0, 0.0)
    )


def change_gait(at_s: float, name: str) -> Command:
    """Go on with another gait."""
    return Command(at_s=at_s, text=f"gait {name}", apply=lambda controller: controller.gait(name))


def pose(
    at_s: float,
    *,
    height_m: float | None = None,
    roll_rad: float | None = None,
    pitch_rad: float | None = None,
    yaw_rad: float | None = None,
    lean_m: Vec2 | None = None,
) -> Command:
    """Take a posture; None leaves a part as it is."""
    given = {
        "height_m": height_m,
        "roll_rad": roll_rad,
        "pitch_rad": pitch_rad,
        "yaw_rad": yaw_rad,
        "lean_m": lean_m,
    }
    words = ", ".join(f"{name} {value}" for name, value in given.items() if value is not None)
    return Command(
        at_s=at_s,
        text=f"posture {words}",
        apply=lambda controller: controller.posture(
            height_m=height_m, roll_rad=roll_rad, pitch_rad=pitch_rad, yaw_rad=yaw_rad, lean_m=lean_m
        ),
        posed=bool(roll_rad or pitch_rad) if (roll_rad, pitch_rad) != (None, None) else None,
    )


def lower(at_s: float, within_s: float | None = None) -> Command:
    """Plant the feet and lie down."""
    return Command(
        at_s=at_s,
        text="lower",
        apply=lambda controller: controller.lower(within_s),
        twist=(0.0, 0.0, 0.0),
    )


def rise(at_s: float) -> Command:
    """Stand up."""
    return Command(at_s=at_s, text="rise", apply=lambda controller: controller.rise(), twist=(0.0, 0.0, 0.0))


def cut(at_s: float) -> Command:
    """End all pulses."""
    return Command(at_s=at_s, text="cut", apply=None, twist=(0.0, 0.0, 0.0))


def walking(
    robot: Robot,
    vx: float,
    vy: float = 0.0,
    yaw_rate: float = 0.0,
    *,
    pivot: Vec2 = (0.0, 0.0),
    gait: str | None = None,
    duration_s: float | None = None,
    name: str = "walk",
    about: str = "one velocity, then stand",
) -> Scenario:
    """Stand, walk with one velocity for `duration_s` (None: long enough to measure), stand."""
    long_s = duration_s or _walk_s(robot, gait)
    return Scenario(
        name=name,
        about=about,
        commands=(
            walk(SETTLE_S, vx, vy, yaw_rate, pivot),
            stand(SETTLE_S + long_s),
        ),
        duration_s=SETTLE_S + long_s + 1.5,
        gait=gait,
    )


def _walk_s(robot: Robot, gait: str | None) -> float:
    chosen = robot.gait(gait) if gait else robot.gaits[0]
    slowest = chosen.cycle_s or chosen.cycle_range_s[0]
    return max(WALK_S, 1.5 + LAST_CYCLES * slowest)


def _straight(robot: Robot) -> Scenario:
    return walking(
        robot, 0.9 * robot.envelope.forward_m_s, name="straight", about="forward at 90 % of the envelope"
    )


def _back(robot: Robot) -> Scenario:
    return walking(robot, -0.9 * robot.envelope.forward_m_s, name="back", about="backward at 90 %")


def _sideways(robot: Robot) -> Scenario:
    return walking(
        robot, 0.0, 0.9 * robot.envelope.sideways_m_s, name="sideways", about="to the left at 90 %"
    )


def _turn(robot: Robot) -> Scenario:
    return walking(
        robot, 0.0, 0.0, 0.9 * robot.envelope.turn_rad_s, name="turn", about="turn on the spot at 90 %"
    )


def _arc(robot: Robot) -> Scenario:
    return walking(
        robot,
        0.65 * robot.envelope.forward_m_s,
        0.0,
        0.65 * robot.envelope.turn_rad_s,
        name="arc",
        about="forward and turning, 65 % of each",
    )


def _pivot(robot: Robot) -> Scenario:
    radius_m = 1.5
    yaw_rate = 0.9 / math.hypot(radius_m / robot.envelope.sideways_m_s, 1 / robot.envelope.turn_rad_s)
    return walking(
        robot,
        0.0,
        0.0,
        yaw_rate,
        pivot=(radius_m, 0.0),
        name="pivot",
        about="circle sideways about a point 1.5 m ahead, at 90 %",
    )


def _stop(robot: Robot) -> Scenario:
    forward = robot.envelope.forward_m_s
    return Scenario(
        name="stop",
        about="full speed forward, stop, full speed back, stop",
        commands=(walk(0.5, forward, 0, 0), stand(2.5), walk(4.0, -forward, 0, 0), stand(6.0)),
        duration_s=7.5,
    )


def _emergency(robot: Robot) -> Scenario:
    at_s, crouch_s = 2.5, robot.safety.crouch_s
    return Scenario(
        name="emergency-1",
        about="category 1 stop from full speed: plant, crouch, cut",
        commands=(
            walk(0.5, robot.envelope.forward_m_s, 0, 0),
            lower(at_s, crouch_s),
            cut(at_s + crouch_s),
        ),
        duration_s=at_s + crouch_s + 1.5,
    )


def _cut(robot: Robot) -> Scenario:
    return Scenario(
        name="emergency-0",
        about="category 0 stop from full speed: all pulses end at once",
        commands=(walk(0.5, robot.envelope.forward_m_s, 0, 0), cut(2.5)),
        duration_s=4.5,
    )


def _gaits(robot: Robot) -> Scenario:
    share = 0.4
    commands = [walk(SETTLE_S, share * robot.envelope.forward_m_s, 0, 0)]
    at_s = SETTLE_S
    for gait in (*robot.gaits[1:], robot.gaits[0]):
        at_s += 4.0
        commands.append(change_gait(at_s, gait.name))
    at_s += 4.0
    return Scenario(
        name="gaits",
        about="through all gaits while walking at 40 %",
        commands=(*commands, stand(at_s)),
        duration_s=at_s + 3.0,
    )


def _posture(robot: Robot) -> Scenario:
    limits = robot.posture_limits
    share = 0.6
    roll, pitch, yaw = share * limits.roll_rad, share * limits.pitch_rad, share * limits.yaw_rad
    lean = share * limits.lean_m
    low, high = limits.height_m
    level = robot.stance.height_m
    changes = [
        pose(0.5, height_m=level + share * (low - level)),
        pose(1.7, height_m=level + share * (high - level)),
        pose(2.9, height_m=level),
        pose(3.6, roll_rad=roll),
        pose(4.8, roll_rad=0.0, pitch_rad=pitch),
        pose(6.0, pitch_rad=0.0, yaw_rad=yaw),
        pose(7.2, yaw_rad=0.0, lean_m=(lean, 0.0)),
        pose(8.4, lean_m=(0.0, lean)),
        pose(9.6, lean_m=(0.0, 0.0)),
        lower(10.8),
        rise(13.0),
    ]
    return Scenario(
        name="posture",
        about="height, roll, pitch, yaw, lean at 60 % of their limits; lie down and rise",
        commands=tuple(changes),
        duration_s=15.5,
    )


def random_walk(robot: Robot, seed: int, *, duration_s: float = 12.0) -> Scenario:
    """Random velocities within the envelope, each held 0.3 to 2.5 s, with a stand now and then."""
    draw = np.random.default_rng((seed, 5))
    commands, at_s = [], SETTLE_S
    while at_s < duration_s - 3.0:
        direction = draw.normal(size=3)
        direction *= draw.uniform(0.2, 1.0) / np.linalg.norm(direction)
        if draw.random() < 0.15:
            commands.append(stand(at_s))
        else:
            commands.append(
                walk(
                    at_s,
                    float(direction[0]) * robot.envelope.forward_m_s,
                    float(direction[1]) * robot.envelope.sideways_m_s,
                    float(direction[2]) * robot.envelope.turn_rad_s,
                )
            )
        at_s += float(draw.uniform(0.3, 2.5))
    commands.append(stand(at_s))
    return Scenario(
        name="random",
        about=f"random commands, seed {seed}",
        commands=tuple(commands),
        duration_s=at_s + 1.5,
    )


_BUILDERS: dict[str, Callable[[Robot], Scenario]] = {
    "straight": _straight,
    "back": _back,
    "sideways": _sideways,
    "turn": _turn,
    "arc": _arc,
    "pivot": _pivot,
    "stop": _stop,
    "emergency-1": _emergency,
    "emergency-0": _cut,
    "gaits": _gaits,
    "posture": _posture,
}
SCENARIOS: tuple[str, ...] = (*_BUILDERS, "random")


def scenario(name: str, robot: Robot, *, seed: int = 0) -> Scenario:
    """The built-in scenario of that name, made for `robot`.

    Raises CommandError when there is none.
    """
    if name == "random":
        return random_walk(robot, seed)
    builder = _BUILDERS.get(name)
    if builder is None:
        raise CommandError(f"there is no scenario {name!r}; there are: {', '.join(SCENARIOS)}")
    return builder(robot)


def in_order(commands: Sequence[Command]) -> tuple[Command, ...]:
    """Commands by ascending time; those of the same time stay in order."""
    return tuple(sorted(commands, key=lambda command: command.at_s))
