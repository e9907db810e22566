"""A whole robot on an injected clock: machine, loop, bus thread, PCA9685 driver and register-true chips.

Everything is the real thing but the clock, the chips behind the I2C bus and
what moves the time: `World` steps it from deadline to deadline, and whoever
sleeps (the driver setting up, a transfer that hangs) sleeps by the same clock.
Times in s, pulses in us.  Judges nothing: `witness` does.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any, cast
from unittest import mock

from campaign.stepping import PATIENCE_S, Clock, SteppedBus
from campaign.witness import Witness
from hobnail.config import load_robot
from hobnail.robot import Robot
from hobnail.service.drivers import make_driver
from hobnail.service.loop import Loop
from hobnail.service.machine import Machine
from hobnail.service.notify import Notifier
from hobnail.service.server import SocketServer
from hobnail.service.states import State
from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.chip_model import ModelledOutputLine
from hobnail_drivers.contract import Driver
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.gpio import OutputLine
from hobnail_drivers.i2c import SmBus
from hobnail_drivers.pca9685 import Pca9685Driver
from hobnail_drivers.pca9685_chip import Chip

CONFIG = Path(__file__).parents[2] / "config"
EX_CONFIG = 78  # sysexits.h; the unit does not restart on it
ROBOT = "CAMPAIGN_ROBOT"  # in the environment, so that processes of their own have it too
STATES = tuple(str(state) for state in State)


@cache
def demo() -> Robot:
    """The demo robot that the campaign is on, as configured."""
    return load_robot(CONFIG / f"{os.environ.get(ROBOT, 'juniper')}.yaml")


def slowest_gait(robot: Robot) -> str:
    """The gait that keeps most feet down."""
    return max(robot.gaits, key=lambda gait: gait.duty).name


def brisk(robot: Robot, **safety: Any) -> Robot:
    """The robot with shorter waits and quicker rising; the order of things stays."""
    return replace(
        robot,
        safety=replace(robot.safety, wake_interval_s=0.04, **safety),
        posture_limits=replace(robot.posture_limits, rate_m_s=0.2),
    )


class Fed(Notifier):
    """Keeps when the watchdog was fed."""

    def __init__(self, clock: Clock) -> None:
        super().__init__({"WATCHDOG_USEC": "2000000"})
        self.times_s: list[float] = []
        self._clock = clock

    def watchdog(self) -> None:
        self.times_s.append(self._clock())


class World:
    """One robot from power-up on.  `service` is the program's part and can be started anew; chips stay.

    `plan` is the fault injector between driver and buses.
    """

    def __init__(self, robot: Robot, *, driver: type[Driver] | None = None, **parts: Any) -> None:
        """`driver` instead of the PCA9685 one; `parts` go to every loop, `monitor` to its bus."""
        self.robot = robot
        self.clock = Clock()
        self.plan = FaultInjector()
        self.chips = {
            board.name: Chip(board.address, oscillator_hz=board.oscillator_hz, clock=self.clock)
            for board in robot.boards
        }
        self.wires = {
            number: BusModel([self.chips[board.name] for board in robot.boards if board.bus == number])
            for number in {board.bus for board in robot.boards}
        }
        self.witness = Witness(robot, self.chips, self.clock)
        self.parts = parts
        self.script: list[tuple[float, Callable[[], object]]] = []
        self.sockets: SocketServer | None = None
        self._kind = driver or cast(type[Driver], self._driver)
        self._patch = mock.patch("time.sleep", self.clock.sleep)  # the chip's library sleeps, too
        self._patch.start()
        self.start_service()

    # ---- the program

    def start_service(self, last_joints_rad: Any = None) -> None:
        """Start the program: driver, bus thread, machine, loop; as `serve` does."""
        self.fed = Fed(self.clock)
        self.bus = SteppedBus(
            make_driver(self._kind, self.robot),
            self.clock,
            retries=self.robot.safety.bus_retries,
            monitor=self.parts.get("monitor"),
        )
        self.bus.start()
        self.bus.set_up()
        while not self.bus.is_set_up:
            self._pass(self.clock.now_s + 0.01)
        self.machine = Machine(self.robot, now_s=self.clock.now_s, last_joints_rad=last_joints_rad)
        parts = {name: part for name, part in self.parts.items() if name != "monitor"}
        after = (self.witness.ticked, *parts.pop("after_tick", ()))
        self.loop = Loop(
            self.machine,
            self.bus,
            self,
            clock=self.clock,
            sleep=self.clock.sleep,
            notifier=self.fed,
            after_tick=after,
            **parts,
        )

    def kill_service(self) -> None:
        """The program dies and does nothing more; the chips go on by themselves."""
        self.bus.settle()
        self.bus.driver = mock.create_autospec(
            Driver, instance=True
        )  # what its thread does now reaches no chip
        self.bus.close(PATIENCE_S)
        self.witness.rebase()

    def _driver(self, *settings: Any, **more: Any) -> Pca9685Driver:
        return Pca9685Driver(
            *settings, **more, open_bus=self._open_bus, open_line=self._open_line, sleep=self.clock.sleep
        )

    def _open_bus(self, number: int) -> SmBus:
        self.wires[number].open()
        return self.plan.bus(self.wires[number])

    def _open_line(self, chip: str, line: int) -> OutputLine:
        return ModelledOutputLine(
            [self.chips[board.name] for board in self.robot.boards if board.output_enable == (chip, line)]
        )

    # ---- what the loop needs of a server

    def serve(self, until_s: float) -> None:
        self._pass(until_s)

    def state_due(self) -> bool:
        return self.sockets is not None and self.sockets.state_due()

    def publish(self, params: dict[str, object]) -> None:
        assert self.sockets is not None
        self.sockets.publish(params)

    def _pass(self, until_s: float) -> None:
        """Let the time pass, and everything happen that is due in it."""
        self._see()
        while True:
            scripted_s = self.script[0][0] if self.script else math.inf
            wakes_s = self.clock.wakes_s
            next_s = min(scripted_s, math.inf if wakes_s is None else wakes_s)
            if next_s > until_s:
                break
            self.clock.advance_to(next_s)
            if scripted_s <= next_s:
                self.script.pop(0)[1]()
            self.bus.settle()
        if self.sockets is not None:
            self.sockets.serve(until_s)
            self.bus.settle()
        self.clock.advance_to(until_s)

    def _see(self) -> None:
        self.bus.settle()
        self.witness.look()

    # ---- what scenarios do

    @property
    def state(self) -> str:
        return str(self.machine.state)

    def ask(self, method: str, client: int = 1, **params: object) -> object:
        """A request, as the server hands it over."""
        answer = self.machine.request(method, params, client, self.clock.now_s)
        self.bus.settle()
        return answer

    def told(self) -> dict[str, Any]:
        """What `state` tells."""
        return self.machine.snapshot(self.clock.now_s)

    def after(self, seconds: float, action: Callable[[], object]) -> None:
        """Have it done so much later, while the loop idles."""
        self.script.append((self.clock.now_s + seconds, action))
        self.script.sort(key=lambda entry: entry[0])

    def run(self, seconds: float, each: Callable[[], object] | None = None) -> None:
        """Let the loop run for so long; `each` is called after each tick."""
        end_s = self.clock.now_s + seconds - 1e-6

        def finished() -> bool:
            if each is not None:
                each()
                self.bus.settle()
            return self.clock.now_s >= end_s

        self.loop.run(finished)
        self._see()

    def until(self, state: str, within_s: float) -> float:
        """Let the loop run until that state; how long it took."""
        began_s = self.clock.now_s
        self.loop.run(lambda: self.state == state or self.clock.now_s > began_s + within_s)
        self._see()
        assert self.state == state, f"still {self.state} after {within_s:g} s, wanted {state}"
        return self.clock.now_s - began_s

    def close(self) -> None:
        """End the threads."""
        self.plan.clear()
        self.clock.end()
        self.bus.close(PATIENCE_S)
        self._patch.stop()
