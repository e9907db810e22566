"""What a rehearsal asks of the robot and when: built-in scenarios for any robot; m/s, rad/s, s, body frame.

A scenario is a list of timed requests, the same that clients send over the
socket.  Speeds are shares of the robot's certified envelope, so that one list
suits every robot.  Nothing here runs anything (`runner` does) or reads a file
(`script` does).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np

from hobnail.errors import CommandError
from hobnail.motion.planar import to_origin
from hobnail.robot import Robot, Vec2, Vec3
from hobnail.service.route import expected_seconds
from hobnail.service.route_file import steps_to_json
from hobnail.service.route_steps import ChangeGait, Move, Pose, Step, Wait
from hobnail.workshop.rehearse.limits import Limits

SETTLE_S = 0.5  # stands before the first command
LEAST_WALK_S = 5.0
LONGEST_WALK_S = 15.0
LEAST_WAY_M = 1.5  # of a straight walk, so that its drift a metre can be told from chance
LEAST_CYCLES = 5  # of the slowest cycle that a gait allows: what a measured stretch holds at least
LIMITS = Limits()
# What is asked of gaits that a robot was not tuned for.
GAIT_LIMITS = Limits(
    error_share=0.15, speed_error_m_s=0.02, drift_rad_m=math.radians(6.0), tilt_rad=math.radians(6.0)
)
STILL: Vec3 = (0.0, 0.0, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Command:
    """At `at_s` the request `method` with `params` is sent.

    `twist` is the velocity at the body origin asked for from then on, None when
    the request does not change it.  `posed` is True while roll or pitch are asked for.
    """

    at_s: float
    method: str
    params: dict[str, object] = field(default_factory=dict)
    twist: Vec3 | None = None
    posed: bool | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    """`commands` in the order of time, and how long it lasts at most.

    It starts standing, in `gait` (None: the robot's first), or, with `lying`, on its
    belly without pulses.  A scenario with a `route` ends a second after the route.
    """

    name: str
    about: str
    commands: tuple[Command, ...]
    duration_s: float
    gait: str | None = None
    lying: bool = False
    route: bool = False
    limits: Limits = LIMITS


def walk(at_s: float, vx: float, vy: float, yaw_rate: float, pivot: Vec2 = (0.0, 0.0)) -> Command:
    """Walk with the velocity (vx, vy) of the point `pivot`, turning."""
    return Command(
        at_s=at_s,
        method="walk",
        params={"vx": vx, "vy": vy, "yaw_rate": yaw_rate, "pivot": pivot},
        twist=to_origin(vx, vy, yaw_rate, pivot),
    )


def stand(at_s: float) -> Command:
    """Come to a stand; from lying, wake and rise."""
    return Command(at_s=at_s, method="stand", twist=STILL)


def rest(at_s: float) -> Command:
    """Lie down."""
    return Command(at_s=at_s, method="rest", twist=STILL)


def change_gait(at_s: float, name: str) -> Command:
    """Go on with another gait."""
    return Command(at_s=at_s, method="gait", params={"name": name})


def pose(at_s: float, **posture: object) -> Command:
    """Take a posture: height_m, roll_rad, pitch_rad, yaw_rad, lean_m; what is not given stays."""
    tilts = [posture[name] for name in ("roll_rad", "pitch_rad") if name in posture]
    return Command(at_s=at_s, method="posture", params=dict(posture), posed=any(tilts) if tilts else None)


def stop(at_s: float, category: int) -> Command:
    """Emergency stop: category 0 cuts the pulses, 1 plants the feet and crouches first."""
    return Command(
        at_s=at_s, method="stop", params={"category": category, "reason": "rehearsed"}, twist=STILL
    )


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
    long_s = duration_s
    if long_s is None:
        long_s = _walk_s(robot, gait)
        if vx and not (vy or yaw_rate):
            long_s = max(long_s, min(2.0 + LEAST_WAY_M / abs(vx), LONGEST_WALK_S))
    return Scenario(
        name=name,
        about=about,
        commands=(walk(SETTLE_S, vx, vy, yaw_rate, pivot), stand(SETTLE_S + long_s)),
        duration_s=SETTLE_S + long_s + 1.5,
        gait=gait,
    )


def _walk_s(robot: Robot, gait: str | None) -> float:
    chosen = robot.gait(gait) if gait else robot.gaits[0]
    slowest = chosen.cycle_s or 0.5 * (chosen.cycle_range_s[0] + chosen.cycle_range_s[1])
    return max(LEAST_WALK_S, 2.0 + LEAST_CYCLES * slowest)


def _straight(robot: Robot) -> Scenario:
    speed = 0.9 * robot.envelope.forward_m_s
    return walking(robot, speed, name="straight", about="forward at 90 % of the envelope")


def _back(robot: Robot) -> Scenario:
    return walking(robot, -0.9 * robot.envelope.forward_m_s, name="back", about="backward at 90 %")


def _sideways(robot: Robot) -> Scenario:
    speed = 0.9 * robot.envelope.sideways_m_s
    return walking(robot, 0.0, speed, name="sideways", about="to the left at 90 %")


def _turn(robot: Robot) -> Scenario:
    rate = 0.9 * robot.envelope.turn_rad_s
    return walking(robot, 0.0, 0.0, rate, name="turn", about="turn on the spot at 90 %")


def _arc(robot: Robot) -> Scenario:
    share = 0.65
    envelope = robot.envelope
    return walking(
        robot,
        share * envelope.forward_m_s,
        0.0,
        share * envelope.turn_rad_s,
        name="arc",
        about="forward and turning at 65 % of each",
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
        about="circle sideways about a point 1.5 m ahead at 90 %",
    )


def _stop(robot: Robot) -> Scenario:
    forward = robot.envelope.forward_m_s
    return Scenario(
        name="stop",
        about="full speed forward, stop, full speed back, stop",
        commands=(walk(0.5, forward, 0, 0), stand(2.5), walk(4.0, -forward, 0, 0), stand(6.0)),
        duration_s=7.5,
    )


def _emergency(robot: Robot, category: int, about: str) -> Scenario:
    ends_s = 2.5 + (robot.safety.crouch_s if category else 0.0)
    return Scenario(
        name=f"emergency-{category}",
        about=about,
        commands=(walk(0.5, robot.envelope.forward_m_s, 0, 0), stop(2.5, category)),
        duration_s=ends_s + 1.5,
    )


def _gaits(robot: Robot) -> Scenario:
    at_s = SETTLE_S
    commands = [walk(at_s, 0.4 * robot.envelope.forward_m_s, 0, 0)]
    for gait in (*robot.gaits[1:], robot.gaits[0]):
        at_s += 4.0
        commands.append(change_gait(at_s, gait.name))
    return Scenario(
        name="gaits",
        about="through all gaits while walking at 40 %, with wider limits",
        commands=(*commands, stand(at_s + 4.0)),
        duration_s=at_s + 7.0,
        limits=GAIT_LIMITS,
    )


def _posture(robot: Robot) -> Scenario:
    limits = robot.posture_limits
    share = 0.6
    low, high = limits.height_m
    level = robot.stance.height_m
    lean = share * limits.lean_m
    changes = (
        pose(0.5, height_m=level + share * (low - level)),
        pose(1.7, height_m=level + share * (high - level)),
        pose(2.9, height_m=level),
        pose(3.6, roll_rad=share * limits.roll_rad),
        pose(4.8, roll_rad=0.0, pitch_rad=share * limits.pitch_rad),
        pose(6.0, pitch_rad=0.0, yaw_rad=share * limits.yaw_rad),
        pose(7.2, yaw_rad=0.0, lean_m=(lean, 0.0)),
        pose(8.4, lean_m=(0.0, lean)),
        pose(9.6, lean_m=(0.0, 0.0)),
    )
    return Scenario(
        name="posture",
        about="height, roll, pitch, yaw and lean at 60 % of their limits",
        commands=changes,
        duration_s=11.0,
    )


def _life(robot: Robot) -> Scenario:
    waking_s = 2.0 + len(robot.joints) * robot.safety.wake_interval_s
    up_s = waking_s + 2.0 * robot.stance.height_m / robot.posture_limits.rate_m_s
    return Scenario(
        name="life",
        about="from lying without pulses: wake, rise, walk, lie down, off",
        commands=(
            stand(0.2),
            walk(up_s, 0.6 * robot.envelope.forward_m_s, 0, 0),
            Command(at_s=up_s + 2.5, method="off", twist=STILL),
        ),
        duration_s=up_s + 2.5 + up_s,
        lying=True,
    )


def _demo_route(robot: Robot) -> Scenario:
    """A round that touches every kind of step, sized to the robot's speed."""
    reach_m = round(4.0 * robot.envelope.forward_m_s, 2)
    steps: list[Step] = [
        Move(twist=(reach_m, 0.0, 0.0)),
        Move(twist=(0.0, 0.0, math.pi / 2)),
        Move(twist=(0.0, 0.4 * reach_m, 0.0)),
        Wait(duration_s=0.5),
        Pose(height_m=sum(robot.posture_limits.height_m) / 2),
        Pose(height_m=robot.stance.height_m),
        Move(twist=(0.5 * reach_m, 0.0, -math.pi / 2)),
        Move(twist=(-0.5 * reach_m, 0.0, 0.0)),
    ]
    if len(robot.gaits) > 1:
        steps[2:2] = [ChangeGait(name=robot.gaits[0].name)]
    return route(
        steps, robot, name="route", about="a round of straight, turn, sideways, wait, posture, arc, back"
    )


def route(
    steps: Sequence[Step], robot: Robot, *, name: str = "route", about: str = "a route file"
) -> Scenario:
    """Walk a route and stand; lasts until a second after its end."""
    return Scenario(
        name=name,
        about=about,
        commands=(Command(at_s=SETTLE_S, method="route", params={"steps": steps_to_json(steps)}),),
        duration_s=SETTLE_S + 10.0 + 3.0 * sum(expected_seconds(steps, robot)),
        route=True,
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
    "emergency-0": lambda robot: _emergency(robot, 0, "category 0 stop from full speed: all pulses end"),
    "emergency-1": lambda robot: _emergency(robot, 1, "category 1 stop from full speed: plant, crouch, cut"),
    "gaits": _gaits,
    "posture": _posture,
    "route": _demo_route,
    "life": _life,
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
