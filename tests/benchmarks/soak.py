"""An hour's work in simulated time, as fast as it goes: is the memory flat, was every tick taken?

The real machine, loop, bus thread, PCA9685 driver, recorder and log, over the
chip model, on a clock that only moves when the loop waits.  The robot walks,
turns, changes gait and posture, is watched, and every ten minutes is stopped,
reset and woken.  Memory is looked at each tenth of the time.  The same in real
time, over the socket: `endurance.py`.
Run: python tests/benchmarks/soak.py [SECONDS]
"""

from __future__ import annotations

import gc
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path
from typing import Any

from hobnail import load_robot
from hobnail.service.bus import Bus
from hobnail.service.drivers import make_driver
from hobnail.service.loop import Loop
from hobnail.service.machine import Machine
from hobnail.service.recorder import Recorder
from hobnail.service.states import State
from hobnail.service.writer import EventLog, Writer
from hobnail_drivers.chip_model import ModelledPca9685Driver

CONFIG = Path(__file__).parents[2] / "config" / "juniper.yaml"
STOP_EVERY_S = 600.0
SPEEDS = (
    (0.2, 0.0, 0.0),
    (0.1, 0.0, 0.6),
    (-0.15, 0.0, 0.0),
    (0.0, 0.1, 0.0),
    (0.0, 0.0, -0.8),
    (9.0, 3.0, 2.0),
)
WAIT_S = 10.0  # real time; a bound for a broken bus thread


class Soak:
    """The service's parts on a simulated clock; also what the loop takes for its server."""

    def __init__(self, directory: Path) -> None:
        self.robot = load_robot(CONFIG)
        self.now_s = 1000.0
        self.writer = Writer("soak")
        driver = make_driver(ModelledPca9685Driver, self.robot)
        assert isinstance(driver, ModelledPca9685Driver)
        self.chips = driver.chips.values()
        for chip in self.chips:
            chip._clock = self.clock
        driver._sleep = self.sleep
        self.bus = Bus(driver, retries=self.robot.safety.bus_retries, clock=self.clock)
        self.bus.start()
        self.bus.set_up()
        assert self.bus.wait(WAIT_S)
        self.machine = Machine(self.robot, now_s=self.now_s)
        self.watched: dict[str, Any] = {}
        self.frames = 0  # handed to the bus, by our own count
        self.recorder = Recorder(directory, self.robot)
        self.loop = Loop(
            self.machine,
            self.bus,
            self,
            clock=self.clock,
            sleep=self.sleep,
            recorder=self.recorder,
            log=EventLog(self.writer, directory),
            before_tick=self.command,
            after_tick=(self.count,),
        )

    def clock(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds

    def serve(self, until_s: float) -> None:
        assert self.bus.wait(WAIT_S)
        self.now_s = max(self.now_s, until_s)

    def state_due(self) -> bool:
        return self.loop.ticks % 10 == 0

    def publish(self, params: dict[str, Any]) -> None:
        self.watched = params

    def count(self, _now_s: float) -> None:
        self.frames += self.machine.state not in (State.OFF, State.STOPPED)

    def command(self, now_s: float) -> None:
        """What a client would send at this time."""
        ticks = self.loop.ticks
        if ticks % 10:
            return
        machine, gaits = self.machine, self.robot.gaits
        turn = ticks // 1000
        if ticks % round(STOP_EVERY_S / self.robot.period_s) == 0 and machine.state is State.WALKING:
            machine.request("stop", {"category": turn % 2}, 2, now_s)
        elif machine.state is State.STOPPED:
            machine.request("reset", {}, 2, now_s)
        elif machine.state is State.OFF:
            machine.request("stand", {}, 1, now_s)
        elif machine.state in (State.STANDING, State.WALKING) and machine.goal is State.STANDING:
            if ticks % 1000 == 0:
                machine.request("gait", {"name": gaits[turn % len(gaits)].name}, 1, now_s)
                machine.request("posture", {"roll_rad": 0.05 * (turn % 3 - 1)}, 1, now_s)
            vx, vy, yaw_rate = SPEEDS[turn % len(SPEEDS)]
            machine.request("walk", {"vx": vx, "vy": vy, "yaw_rate": yaw_rate}, 1, now_s)


def memory() -> tuple[int, Counter[str]]:
    """Resident memory, kB, and the objects alive, by type."""
    gc.collect()
    status = Path("/proc/self/status").read_text()
    kinds = Counter(type(thing).__qualname__ for thing in gc.get_objects())
    return int(status.split("VmRSS:")[1].split()[0]), kinds


def main() -> int:
    """Walk and print; 1 when a tick was lost, or memory grows from half-time on."""
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 3600.0
    with tempfile.TemporaryDirectory() as folder:
        soak = Soak(Path(folder))
        began_s, start_s = time.monotonic(), soak.now_s
        seen: list[tuple[int, Counter[str]]] = []
        print("simulated s   real s   resident kB   objects     ticks   skipped   frames   state")
        for tenth in range(1, 11):
            until_s = start_s + seconds * tenth / 10.0
            soak.loop.run(lambda until_s=until_s: soak.now_s >= until_s - 1e-6)  # type: ignore[misc]
            assert soak.bus.wait(WAIT_S)
            seen.append(memory())
            resident, kinds = seen[-1]
            print(
                f"{soak.now_s - start_s:11.0f} {time.monotonic() - began_s:8.1f} {resident:13d} "
                f"{kinds.total():9d} {soak.loop.ticks:9d} {soak.loop.skipped:9d} {soak.bus.frames:8d}   "
                f"{soak.machine.state}",
                flush=True,
            )
        ticks = round(seconds / soak.robot.period_s)
        lost = ticks - soak.loop.ticks, soak.frames - soak.bus.frames
        faults = {name: soak.machine.faults.total(name) for name in soak.machine.faults._totals}
        soak.bus.close(WAIT_S)
        soak.writer.close(WAIT_S)
        cut = sum(len(chip.cut()) for chip in soak.chips)
    (half_kb, half), (end_kb, end) = seen[4], seen[-1]
    print(f"ticks lost {lost[0]}, frames lost {lost[1]}, pulses cut {cut}")
    print(f"clamped {soak.machine.counters['clamped']}, out of reach {soak.machine.counters['out_of_reach']}")
    print("faults", {name: count for name, count in faults.items() if count})
    grown = {name: end[name] - half[name] for name in end if end[name] > half[name] + 20}
    print(f"from half-time on: resident {end_kb - half_kb:+d} kB, objects {end.total() - half.total():+d}")
    print(f"of a kind 20 more than at half-time: {grown or 'none'}")
    return 1 if any(lost) or grown or end_kb > 1.02 * half_kb else 0


if __name__ == "__main__":
    sys.exit(main())
