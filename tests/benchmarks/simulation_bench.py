"""How many times faster than real time a robot walks with no hardware: controller and simulated servos.

    python tests/benchmarks/simulation_bench.py [--seconds N] [config/juniper.yaml ...]

One process, one core, the clock injected; a new command every two seconds, or one for all
the time.  Times are
the process's own (CPU), so that a busy machine does not slow them.  Nothing here is a test.
"""

from __future__ import annotations

import argparse
import math
import time
from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import cast

from hobnail import load_robot
from hobnail.controller import Controller
from hobnail.robot import Robot
from hobnail.service.drivers import make_driver
from hobnail_drivers.contract import Driver
from hobnail_drivers.simulated import SimulatedDriver

CONFIG = Path(__file__).parents[2] / "config"
PERIOD_S = 0.01  # 100 Hz for all


def simulate(robot: Robot, gait: str, seconds: float, *, driven: bool, changing: bool) -> float:
    """CPU time (s) for that many seconds of walking."""
    now_s = 0.0
    kind = cast(type[Driver], partial(SimulatedDriver, clock=lambda: now_s))
    driver = make_driver(kind, robot)
    driver.open()
    controller = Controller(robot)
    controller.gait(gait)
    envelope = robot.envelope
    ticks = round(seconds / PERIOD_S)
    start = time.process_time()
    for tick in range(ticks):
        if tick % 200 == 0 and (changing or tick == 0):
            angle = 0.7 * tick / 200
            controller.walk(
                0.6 * envelope.forward_m_s * math.cos(angle),
                0.4 * envelope.sideways_m_s * math.sin(angle),
                0.4 * envelope.turn_rad_s * math.sin(1.3 * angle),
            )
        now_s += PERIOD_S
        pulses = controller.tick(PERIOD_S).pulses_us
        if driven:
            driver.write(pulses)
    took_s = time.process_time() - start
    driver.close()
    return took_s


def main(arguments: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("config", nargs="*", default=[CONFIG / "juniper.yaml", CONFIG / "bramble.yaml"])
    parser.add_argument("--seconds", type=float, default=60.0, help="simulated, for each line")
    options = parser.parse_args(arguments)
    print(f"{options.seconds:g} s of walking at {1.0 / PERIOD_S:g} Hz, best of three")
    print(f"  {'robot':12}{'gait':12}{'times real time':>18}{'controller alone':>18}{'one command':>18}")
    for path in options.config:
        robot = load_robot(path)
        for gait in robot.gaits:
            whole, alone, steady = (
                options.seconds
                / min(
                    simulate(robot, gait.name, options.seconds, driven=driven, changing=changing)
                    for _ in range(3)
                )
                for driven, changing in ((True, True), (False, True), (True, False))
            )
            print(f"  {robot.name:12}{gait.name:12}{whole:17.0f}x{alone:17.0f}x{steady:17.0f}x")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
