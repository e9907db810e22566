"""Prints how much of each injected error a robot takes before it falls or leaves 10 % accuracy.

    PYTHONPATH=runtime:drivers python tests/benchmarks/rehearse_robustness.py [CONFIG]

Each error is raised step by step on a straight walk at 60 % of the envelope (random
errors: the worst of three seeds).  Accuracy is that of speed against the
command, or of the turn rate, whichever is worse.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from hobnail import load_robot
from hobnail.robot import Robot
from hobnail.workshop.rehearse import Result, rehearse, walking

ACCURACY = 0.10
SEEDS = 3


@dataclass(frozen=True)
class Ladder:
    """An error, its steps in the unit shown, and how a step becomes an injected error."""

    name: str
    unit: str
    steps: tuple[float, ...]
    inject: Callable[[float], dict[str, Any]]
    seeds: int = 1


LADDERS = (
    Ladder(
        "horn zero errors, up to",
        "deg",
        (1, 2, 3, 4, 6, 8),
        lambda x: {"zero_error_rad": math.radians(x)},
        SEEDS,
    ),
    Ladder(
        "link length errors, up to", "mm", (1, 2, 4, 6, 8, 12), lambda x: {"length_error_m": x / 1000}, SEEDS
    ),
    Ladder(
        "battery moved back", "mm", (5, 10, 15, 20, 30, 40), lambda x: {"battery_shift_m": (-x / 1000, 0, 0)}
    ),
    Ladder(
        "battery moved aside", "mm", (5, 10, 15, 20, 30, 40), lambda x: {"battery_shift_m": (0, x / 1000, 0)}
    ),
    Ladder("uphill", "deg", (1, 2, 3, 5, 8, 12, 16), lambda x: {"slope_rad": math.radians(x)}),
    Ladder("downhill", "deg", (1, 2, 3, 5, 8, 12, 16), lambda x: {"slope_rad": -math.radians(x)}),
    Ladder(
        "slope from the side",
        "deg",
        (1, 2, 3, 5, 8, 12),
        lambda x: {"slope_rad": math.radians(x), "slope_heading_rad": math.pi / 2},
    ),
    Ladder("friction down to", "", (0.6, 0.4, 0.3, 0.2, 0.15, 0.1), lambda x: {"friction": x}),
    Ladder("bumps, up to", "mm", (2, 4, 6, 8, 12, 16), lambda x: {"roughness_m": x / 1000}, SEEDS),
    Ladder("one knee's torque down to", "%", (80, 60, 50, 40, 30, 20), lambda x: {"weak_servo": x / 100}),
    Ladder("frames lost", "%", (5, 10, 20, 30, 40), lambda x: {"lost_frames": x / 100}, SEEDS),
    Ladder(
        "push from the side",
        "N s",
        (0.3, 0.6, 1.0, 1.5, 2.0, 3.0),
        lambda x: {"push_ns": (0, x), "push_at_s": 3.0},
    ),
    Ladder(
        "push from the front",
        "N s",
        (0.3, 0.6, 1.0, 1.5, 2.0, 3.0),
        lambda x: {"push_ns": (-x, 0), "push_at_s": 3.0},
    ),
    Ladder("supply down to", "V", (5.7, 5.4, 5.1, 4.8, 4.5), lambda x: {"supply_v": x}),
)


def bad(result: Result) -> str:
    """Why a rehearsal is no longer good, empty when it is."""
    if result.fell:
        return "falls"
    if result.faults:
        return f"stops: {', '.join(result.faults)}"
    if not result.stretches:
        return "does not walk"
    off = max(result.speed_error, result.turn_error)
    return f"{off:.0%} off" if off > ACCURACY else ""


def climb(robot: Robot, ladder: Ladder) -> tuple[str, str]:
    """The last step that the robot takes, and what happens at the next."""
    scenario = walking(robot, 0.6 * robot.envelope.forward_m_s)
    taken = "none"
    for step in ladder.steps:
        for seed in range(ladder.seeds):
            why = bad(rehearse(robot, scenario, seed=seed, **ladder.inject(step)))
            if why:
                return taken, f"at {step:g}: {why}"
        taken = f"{step:g} {ladder.unit}".strip()
    return taken, "the most that was tried"


def main() -> int:
    """Print the table."""
    default = Path(__file__).parents[2] / "config" / "juniper.yaml"
    robot = load_robot(sys.argv[1] if len(sys.argv) > 1 else default)
    print(f"{robot.name} walks on, within {ACCURACY:.0%} of the command, with")
    for ladder in LADDERS:
        taken, then = climb(robot, ladder)
        print(f"  {ladder.name:<26} {taken:>9}   ({then})", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
