"""Where joints get their first pulse on the bench: where they were last, else the rest posture; rad.

Never the middle of their travel: a leg would be thrown there.
"""

from __future__ import annotations

from pathlib import Path
from typing import NamedTuple

from hobnail.controller import Controller
from hobnail.robot import Robot
from hobnail.service.archive import load_posture
from hobnail.service.recorder import last_posture


class Start(NamedTuple):
    """The posture by joint, and what it is in words."""

    joints_rad: dict[str, float]
    words: str


def start_posture(robot: Robot, runtime_dir: Path, state_dir: Path | None) -> Start:
    """Where this very robot's service last had the joints; the rest posture when that is not known.

    `runtime_dir` is where the service keeps its last minute, `state_dir` what
    is to outlive a reboot.
    """
    names = [joint.name for joint in robot.joints]
    last = last_posture(runtime_dir, robot)
    if last is None and state_dir is not None:
        last = load_posture(state_dir, robot)
    if last is not None:
        return Start(dict(zip(names, last, strict=True)), "where it was last")
    tick = Controller(robot, at_rest=True).tick(robot.period_s)
    rest = [angle for leg in tick.commanded_rad for angle in leg]
    return Start(dict(zip(names, rest, strict=True)), "the rest posture")
