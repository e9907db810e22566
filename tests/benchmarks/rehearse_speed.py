"""Prints how much faster than real time juniper is rehearsed, and what share the controller takes.

    PYTHONPATH=runtime:drivers python tests/benchmarks/rehearse_speed.py [CONFIG]

Processor time of this process alone, so that other work on the machine does not
count; the physics engine steps in this one thread.  Target: 10 times real time.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

from hobnail import load_robot
from hobnail.workshop.rehearse import run, walking
from hobnail.workshop.rehearse.model import STEP_S

TARGET = 10.0
ROUNDS = 5


def main() -> int:
    """Rehearse a straight walk a few times; exit code 1 below the target."""
    default = Path(__file__).parents[2] / "config" / "juniper.yaml"
    robot = load_robot(sys.argv[1] if len(sys.argv) > 1 else default)
    scenario = walking(robot, 0.6 * robot.envelope.forward_m_s, yaw_rate=0.3 * robot.envelope.turn_rad_s)
    run(robot, scenario)  # imports and caches
    ratios, shares = [], []
    for _ in range(ROUNDS):
        before = time.process_time()
        recording = run(robot, scenario)
        spent_s = time.process_time() - before
        ratios.append(float(recording.time_s[-1]) / spent_s)
        shares.append(recording.controller_wall_s / recording.wall_s)
    ratio, share = sorted(ratios)[ROUNDS // 2], sorted(shares)[ROUNDS // 2]
    print(
        f"{robot.name}: {ratio:.1f} times real time (target {TARGET:g}) with a physics step of "
        f"{1000 * STEP_S:g} ms; the state machine and controller take {share:.1%} of the time"
    )
    return 0 if ratio >= TARGET else 1


if __name__ == "__main__":
    sys.exit(main())
