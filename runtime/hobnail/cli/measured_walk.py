"""One measured walk for `hobnail trim`: asked for, or walked by the running robot; mm, degrees as typed."""

from __future__ import annotations

import math
import re
from argparse import Namespace

from hobnail.cli.dialogue import Dialogue
from hobnail.cli.options import connect
from hobnail.cli.walk import stream
from hobnail.config import digest_on_disk
from hobnail.errors import StateError
from hobnail.motion.planar import Pose
from hobnail.response import relative
from hobnail.robot import Robot
from hobnail.workshop.calibrate.effects import Ask, shown
from hobnail.workshop.trim import KINDS, Walk, check_walk

UNITS = {"ahead": "mm", "sideways": "mm", "turn": "deg"}
SPEED = 0.5  # of the envelope, for a walk of its own
NUMBER = re.compile(r"[+-]?\d{1,6}(\.\d{0,4})?", re.ASCII)
HOW = (
    "Mark the floor under the middle of the body, between the hip axes, and a line straight ahead. After the "
    "walk measure from the mark: mm ahead along the line, mm to the left of it, and by how many degrees the "
    "body has turned to the left; back, right and a turn to the right are negative."
)


def measured_walk(arguments: Namespace, robot: Robot) -> Walk:
    """The walk as odometry and tape have it, from the options, the running robot and what is answered.

    Raises InputEndedError, CommandError (too short a walk), StateError (the robot cannot walk
    now), ServiceError.
    """
    kind = next((kind for kind in KINDS if getattr(arguments, kind) is not None), None)
    if kind is not None and arguments.measured:
        return Walk(kind, _along(kind, getattr(arguments, kind)), _pose(kind, arguments.measured))
    dialogue = Dialogue()
    if kind is None:
        kind = _kind(dialogue)
        (size,) = _numbers(dialogue, f"How far, by its odometry, {UNITS[kind]}?", 1)
    else:
        size = getattr(arguments, kind)
    odometry = _along(kind, size)
    check_walk(Walk(kind, odometry, odometry))
    if arguments.walk:
        if kind != "turn":
            dialogue.say(HOW)
        odometry = _walked(arguments, robot, dialogue, kind, odometry)
    elif kind != "turn":
        dialogue.say(HOW)
    if kind == "turn":
        measured = _numbers(dialogue, "Measured: degrees turned to the left, whole turns counted?", 1)
    else:
        measured = _numbers(dialogue, "Measured: mm ahead, mm left, degrees turned left?", 3)
    return Walk(kind, odometry, _pose(kind, measured))


def _walked(arguments: Namespace, robot: Robot, dialogue: Dialogue, kind: str, wanted: Pose) -> Pose:
    """Let the running robot walk it; what its odometry says."""
    with connect(arguments) as client:
        state = client.state()
        if state.get("robot") != robot.name or state.get("digest") != digest_on_disk(arguments.config):
            raise StateError(
                f"the service on {client.path} runs {state.get('robot')}, with other files than "
                f"{arguments.config} and its calibration as they are now: start it again with these"
            )
        if state.get("state") != "standing":
            raise StateError(
                f"the robot is {state.get('state')}, and must be standing: `hobnail stand` first"
            )
        twist, time_s = _command(robot, kind, wanted)
        free = Ask("walk", f"It walks now, for about {time_s:.0f} s. Is the way free?", ("yes", "no"))
        if dialogue.ask(free).lower() not in ("y", "yes"):
            raise StateError("nothing was walked, and nothing kept")
        before = _told_pose(state)
        after = _told_pose(stream(client, twist, (0.0, 0.0), time_s))
    moved: Pose = relative(before, after)
    dialogue.say(
        f"By its odometry: {1000 * moved[0]:+.0f} mm ahead, {1000 * moved[1]:+.0f} mm left, turned "
        f"{math.degrees(moved[2]):+.1f} deg."
    )
    return moved


def _command(robot: Robot, kind: str, wanted: Pose) -> tuple[Pose, float]:
    """The velocity for a walk, and how long it is to be held."""
    number_of = KINDS.index(kind)
    envelope = robot.envelope
    speed = SPEED * (envelope.forward_m_s, envelope.sideways_m_s, envelope.turn_rad_s)[number_of]
    velocity = math.copysign(speed, wanted[number_of])
    twist = (
        velocity if number_of == 0 else 0.0,
        velocity if number_of == 1 else 0.0,
        velocity if number_of == 2 else 0.0,
    )
    return twist, abs(wanted[number_of]) / speed


def _told_pose(state: dict[str, object]) -> Pose:
    pose = state["pose"]
    assert isinstance(pose, dict)
    return float(pose["x_m"]), float(pose["y_m"]), float(pose["yaw_rad"])


def _kind(dialogue: Dialogue) -> str:
    while True:
        answer = dialogue.ask(Ask("kind", "Which walk was measured?", KINDS)).strip().lower()
        fitting = [kind for kind in KINDS if answer and kind.startswith(answer)]
        if len(fitting) == 1:
            return fitting[0]
        dialogue.say(f"{shown(answer)} is no walk; allowed: {', '.join(KINDS)}")


def _numbers(dialogue: Dialogue, question: str, count: int) -> list[float]:
    """So many numbers in one line, asked for until they are there."""
    while True:
        answer = dialogue.ask(Ask("numbers", question)).strip()
        words = re.split(r"[\s,;]+", answer)
        if len(words) == count and all(
            re.fullmatch(r"[+-]?\d{1,6}(\.\d{0,4})?", word, re.ASCII) for word in words
        ):
            return [float(word) for word in words]
        dialogue.say(
            f"{shown(answer)}: wanted {count} number{'s' if count > 1 else ''}, as in: "
            f"{'1880 50 -3' if count > 1 else '693'}"
        )


def _along(kind: str, size: float) -> Pose:
    """A walk of a size in the units of the options, as a pose."""
    if kind == "turn":
        return 0.0, 0.0, math.radians(size)
    return (size / 1000.0, 0.0, 0.0) if kind == "ahead" else (0.0, size / 1000.0, 0.0)


def _pose(kind: str, measured: list[float]) -> Pose:
    if kind == "turn":
        return 0.0, 0.0, math.radians(measured[0])
    ahead, left, turned = measured
    return ahead / 1000.0, left / 1000.0, math.radians(turned)
