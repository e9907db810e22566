"""How long a whole tick takes, command to bus bytes, beside numeric inverse kinematics of the same legs.

    python tests/benchmarks/tick_bench.py [--rounds N] [config/juniper.yaml ...]

With a new command every 200 ticks, with one in every tick, which is worked out throughout,
and with one that stays: a steady walk recurs.  The peer is `ik_LM` of roboticstoolbox-python (the extra
`benchmarks`), Levenberg-Marquardt in C++: the legs of the same robot alone, random targets
near the stance, started from the last solution.  Its tolerance and iterations are its own
defaults.  All rows are measured by turns in one run; the ratio of medians is what counts.
Nothing here is a test.
"""

from __future__ import annotations

import argparse
import math
import random
import statistics
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import Any, cast

import numpy as np

from hobnail import load_robot
from hobnail.controller import Controller
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Leg, Robot, Vec3
from hobnail.service.drivers import make_driver
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import Driver
from hobnail_drivers.i2c import SmBus

CONFIG = Path(__file__).parents[2] / "config"
NEAR_M = 0.03  # how far targets are from the stance
WARM_UP = 10  # batches
BATCH = 50  # calls of one kind before the next kind's turn


@dataclass
class Row:
    """One thing measured: its calls' times in nanoseconds."""

    name: str
    call: Callable[[], object]
    times_ns: list[int] = field(default_factory=list)

    def run(self) -> None:
        """One batch."""
        call, clock = self.call, time.perf_counter_ns
        for _ in range(BATCH):
            start = clock()
            call()
            self.times_ns.append(clock() - start)

    @property
    def median_us(self) -> float:
        """Of all calls."""
        return statistics.median(self.times_ns) / 1000.0

    @property
    def p99_us(self) -> float:
        """Of all calls."""
        return sorted(self.times_ns)[int(0.99 * len(self.times_ns))] / 1000.0


class CountingBus:
    """Passes everything on to a modelled bus until `quiet`; then transfers cost nothing more than
    being counted, as the kernel's part is the same for any program."""

    def __init__(self, inner: SmBus) -> None:
        self._inner = inner
        self.quiet = False
        self.bytes = 0

    def i2c_rdwr(self, *messages: Any) -> None:
        """Plain I2C messages as one transaction."""
        if not self.quiet:
            self._inner.i2c_rdwr(*messages)
            return
        for message in messages:
            self.bytes += 1 + message.len

    def __getattr__(self, name: str) -> Any:
        return getattr(self._inner, name)


def quiet_driver(robot: Robot) -> tuple[Driver, list[CountingBus]]:
    """The real PCA9685 driver, opened over modelled chips whose buses then fall silent."""
    buses: list[CountingBus] = []

    def wrap(bus: SmBus) -> SmBus:
        buses.append(CountingBus(bus))
        return cast(SmBus, buses[-1])

    kind = cast(type[Driver], partial(ModelledPca9685Driver, wrap_bus=wrap, sleep=lambda _: None))
    driver = make_driver(kind, robot)
    driver.open()
    for bus in buses:
        bus.quiet = True
    return driver, buses


def whole_tick(robot: Robot, driver: Driver, *, every: int) -> Callable[[], None]:
    """A command, a tick and a frame; a command every so many ticks goes slowly round the
    envelope, with 0 there is only the first."""
    controller = Controller(robot)
    envelope = robot.envelope
    count = 0

    def once() -> None:
        nonlocal count
        if count == 0 or (every and count % every == 0):
            angle = 0.7 * count / 200
            controller.walk(
                0.6 * envelope.forward_m_s * math.cos(angle),
                0.4 * envelope.sideways_m_s * math.sin(angle),
                0.4 * envelope.turn_rad_s * math.sin(1.3 * angle),
            )
        count += 1
        driver.write(controller.tick(robot.period_s).pulses_us)

    return once


def targets(robot: Robot, seed: int) -> list[list[Vec3]]:
    """Random feet near the neutral stance, within reach, leg by leg (relative to the hip)."""
    chance = random.Random(seed)
    found = []
    for leg, foot in zip(robot.legs, Controller(robot).tick(robot.period_s).feet_m, strict=True):
        kinematics = LegKinematics(leg)
        points = []
        for _ in range(256):
            x, y, z = (a - h + chance.uniform(-NEAR_M, NEAR_M) for a, h in zip(foot, leg.hip_m, strict=True))
            points.append(kinematics.nearest_reachable(x, y, z))
        found.append(points)
    return found


def closed_form(robot: Robot) -> Callable[[], None]:
    """hobnail's own legs alone."""
    legs = [(LegKinematics(leg), points) for leg, points in zip(robot.legs, targets(robot, 1), strict=True)]
    turn = 0

    def once() -> None:
        nonlocal turn
        turn = (turn + 1) % 256
        for kinematics, points in legs:
            kinematics.angles(*points[turn])

    return once


def numeric(robot: Robot) -> Callable[[], None] | None:
    """The peer's legs alone; None when it is not installed."""
    try:
        from roboticstoolbox import ET
    except ImportError as error:
        print(f"roboticstoolbox-python is not installed ({error}): its row is left out", file=sys.stderr)
        return None

    def arm(leg: Leg) -> Any:
        return (
            ET.Rx() * ET.ty(leg.abduction_m) * ET.Ry() * ET.tz(-leg.upper_m) * ET.Ry() * ET.tz(-leg.lower_m)
        )

    mask = np.array([1.0, 1.0, 1.0, 0.0, 0.0, 0.0])
    start = [np.array(angles) for angles in Controller(robot).tick(robot.period_s).joints_rad]
    legs = []
    for leg, points in zip(robot.legs, targets(robot, 1), strict=True):
        poses = []
        for point in points:
            pose = np.eye(4)
            pose[:3, 3] = point
            poses.append(pose)
        legs.append((arm(leg), poses))
    turn = 0
    last = list(start)

    def once() -> None:
        nonlocal turn
        turn = (turn + 1) % 256
        for index, (ets, poses) in enumerate(legs):
            found = ets.ik_LM(poses[turn], q0=last[index], mask=mask, joint_limits=False)
            last[index] = found.q

    # Honest work: it must find them.
    missed = 0
    for turn in range(256):
        for index, (ets, poses) in enumerate(legs):
            found = ets.ik_LM(poses[turn], q0=last[index], mask=mask, joint_limits=False)
            missed += not found.success
            last[index] = found.q
    if missed:
        print(f"the peer did not find {missed} of {256 * len(legs)} targets", file=sys.stderr)
    return once


def measure(robot: Robot, rounds: int) -> None:
    """Print one robot's table."""
    driver, buses = quiet_driver(robot)
    rows = [
        Row("whole tick: command, motion, pulses, bus bytes", whole_tick(robot, driver, every=200)),
        Row("the same, a new command in every tick", whole_tick(robot, driver, every=1)),
        Row("the same, of a steady walk", whole_tick(robot, driver, every=0)),
        Row(f"closed form, {len(robot.legs)} legs alone", closed_form(robot)),
    ]
    peer = numeric(robot)
    if peer is not None:
        rows.append(Row(f"ik_LM in C++, {len(robot.legs)} legs alone", peer))
    for row in rows:
        for _ in range(WARM_UP):
            row.run()
        row.times_ns.clear()
    sent = sum(bus.bytes for bus in buses)
    for _ in range(rounds):
        for row in rows:
            row.run()
    frames = 3 * rounds * BATCH
    print(f"\n{robot.name}: {len(robot.legs)} legs, {rounds * BATCH} calls each")
    print(f"  {'':48}{'median':>10}{'99 %':>10}{'to ik_LM':>10}")
    for row in rows:
        ratio = f"{row.median_us / rows[-1].median_us:10.2f}" if peer is not None else f"{'-':>10}"
        print(f"  {row.name:48}{row.median_us:7.1f} us{row.p99_us:7.1f} us{ratio}")
    print(f"  bytes on the bus a tick: {(sum(bus.bytes for bus in buses) - sent) / frames:.1f}")
    driver.close()


def main(arguments: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("config", nargs="*", default=[CONFIG / "juniper.yaml", CONFIG / "bramble.yaml"])
    parser.add_argument("--rounds", type=int, default=200, help=f"batches of {BATCH} calls of each kind")
    options = parser.parse_args(arguments)
    for path in options.config:
        measure(load_robot(path), options.rounds)
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
