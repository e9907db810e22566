"""Runs a scenario: the service's state machine, driver and physics in lock-step; keeps what happened.

The loop has no clock of its own: each tick the machine computes a frame, the
driver gets it, and physics runs on by the robot's period.  A failed transfer
is repeated and reported as the service's bus thread does it.  Not run: socket,
threads, recorder; a standing robot is woken without physics.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from hobnail.controller import Tick
from hobnail.errors import FaultError, HobnailError, StateError
from hobnail.robot import Robot, Vec3, WalkResponse
from hobnail.service.machine import Machine
from hobnail.service.states import NO_PULSES, Frame, State
from hobnail.workshop.rehearse.backend import RehearsalDriver, connect
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.plant import Plant, Probe
from hobnail.workshop.rehearse.scenarios import STILL, Command, Scenario
from hobnail_drivers.errors import BusError

Floats = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

CLIENT = 1
RESEND_S = 0.2  # a walk command is streamed, as clients do
WAKING_TAKES_AT_MOST_S = 120.0
AFTER_ROUTE_S = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Recording:
    """One rehearsal, tick by tick: n ticks, L legs, J joints; world frame, SI units.

    `pose` and `velocity` are the odometry's; what is named `true_` is the physics'.
    `command` is the twist asked for at the body origin; `posed` marks ticks in
    which roll or pitch are asked for; `powered` those in which pulses were sent.
    `wall_s` and `controller_wall_s` are times of this machine, not of the robot.
    """

    robot: Robot
    scenario: Scenario
    disturbances: Disturbances
    time_s: Floats  # (n,)
    true_position_m: Floats  # (n, 3)
    true_rotation: Floats  # (n, 3, 3)
    true_velocity_m_s: Floats  # (n, 3)
    true_joints_rad: Floats  # (n, J)
    true_feet_m: Floats  # (n, L, 3)
    foot_force_n: Floats  # (n, L)
    foot_slip_m_s: Floats  # (n, L)
    torque_nm: Floats  # (n, J)
    peak_torque_nm: Floats  # (n, J)
    power_w: Floats  # (n,)
    supply_v: Floats  # (n,)
    trunk_touches: Flags  # (n,)
    joints_rad: Floats  # (n, J), geometric, as the controller wants them
    stance: Flags  # (n, L)
    command: Floats  # (n, 3)
    pose: Floats  # (n, 3)
    velocity: Floats  # (n, 3)
    slowdown: Floats  # (n,)
    height_m: Floats  # (n,)
    state: tuple[str, ...]
    gait: tuple[str, ...]
    walking: Flags  # (n,)
    posed: Flags  # (n,)
    powered: Flags  # (n,)
    clamped: int
    out_of_reach: int
    lost_frames: int
    route_failure: str
    faults: tuple[str, ...]
    wall_s: float
    controller_wall_s: float


def run(robot: Robot, scenario: Scenario, disturbances: Disturbances | None = None) -> Recording:
    """Rehearse `scenario`.

    Raises CommandError (a request or a disturbance out of range), StateError (a
    request that does not fit the state), HobnailError (the physics became unstable),
    DriverUnavailableError (no physics engine).
    """
    # What the robot's own floor makes of its steps is no part of these physics.
    robot = replace(robot, walk=WalkResponse())
    disturbances = disturbances or Disturbances()
    plant = Plant(robot, disturbances)
    driver = connect(robot, plant)
    machine = Machine(robot, now_s=0.0)
    tick = machine.controller.tick(robot.period_s)
    now_s = 0.0
    if scenario.lying:
        plant.place(_lying(robot))
        driver.open()
        plant.command([None] * len(robot.joints))
    else:
        now_s, tick = _wake(machine)
        if scenario.gait is not None:
            machine.request("gait", {"name": scenario.gait}, CLIENT, now_s)
        driver.open()
        targets = driver.targets_rad(tick.pulses_us)
        plant.place([target for target in targets if target is not None])
    return _Run(scenario, machine, driver, now_s, tick).to_the_end(disturbances)


def _wake(machine: Machine) -> tuple[float, Tick]:
    """Wake and rise, without physics; the time then, and the last tick."""
    now_s, dt_s = 0.0, machine.robot.period_s
    machine.request("stand", {}, CLIENT, now_s)
    while now_s < WAKING_TAKES_AT_MOST_S:
        now_s += dt_s
        frame = machine.tick(now_s, dt_s)
        if frame.state is State.STANDING and frame.tick is not None and frame.tick.settled:
            return now_s, frame.tick
    raise StateError(
        f"{machine.robot.name} does not come to a stand within {WAKING_TAKES_AT_MOST_S:.0f} s: it is "
        f"{machine.state}; faults: {', '.join(machine.faults.names()) or 'none'}"
    )


def _lying(robot: Robot) -> list[float]:
    """Joint angles of the rest posture."""
    machine = Machine(robot, now_s=0.0)
    return [angle for leg in machine.controller.tick(robot.period_s).joints_rad for angle in leg]


class _Run:
    """One rehearsal under way: the commands in force, and what was collected."""

    def __init__(
        self, scenario: Scenario, machine: Machine, driver: RehearsalDriver, start_s: float, tick: Tick
    ) -> None:
        self._scenario = scenario
        self._machine = machine
        self._driver = driver
        self._start_s = start_s
        self._tick = tick
        self._waiting = list(scenario.commands)
        self._walk: Command | None = None
        self._sent_s = 0.0
        self._twist: Vec3 = STILL
        self._posed = False
        self._route_failure = ""
        self._faults: dict[str, None] = {}
        self._ticks: list[Tick] = []
        self._probes: list[Probe] = []
        self._in_force: list[tuple[Vec3, bool, bool, str]] = []

    def to_the_end(self, disturbances: Disturbances) -> Recording:
        """All ticks of the scenario."""
        machine, driver, plant = self._machine, self._driver, self._driver.plant
        period_s = machine.robot.period_s
        started, computing = time.perf_counter(), 0.0
        end_s = self._scenario.duration_s
        index = 0
        while index * period_s < end_s - 1e-9:
            now_s = self._start_s + (index + 1) * period_s
            self._send(index * period_s, now_s)
            before = time.perf_counter()
            frame = machine.tick(now_s, period_s)
            computing += time.perf_counter() - before
            self._transfer(frame, now_s)
            driver.advance(period_s)
            if machine.robot.supply.monitor_bus is not None:
                machine.controller.supply_v = plant.supply_v
            self._keep(frame, plant.probe())
            if self._scenario.route and machine.route is not None and machine.route.done:
                self._route_failure = machine.route.failure
                end_s = min(end_s, index * period_s + AFTER_ROUTE_S)
            index += 1
        wall_s = time.perf_counter() - started
        if self._scenario.route and (machine.route is None or not machine.route.done):
            self._route_failure = self._route_failure or "the route did not end in time"
        recording = self._recording(disturbances, wall_s, computing)
        driver.close()
        return recording

    def _send(self, since_s: float, now_s: float) -> None:
        """The requests that are due, and the walk command once more when it grows old."""
        while self._waiting and self._waiting[0].at_s <= since_s + 1e-9:
            command = self._waiting.pop(0)
            try:
                self._machine.request(command.method, dict(command.params), CLIENT, now_s)
            except (StateError, FaultError):
                # After a fault the robot does less than was planned, which the recording tells.
                if not self._machine.faults.names():
                    raise
                continue
            self._walk = command if command.method == "walk" else self._walk
            if command.method in ("stand", "rest", "off", "stop", "route"):
                self._walk = None
            self._sent_s = now_s
            if command.twist is not None:
                self._twist = command.twist
            if command.posed is not None:
                self._posed = command.posed
        if self._walk is not None and now_s - self._sent_s >= RESEND_S:
            self._sent_s = now_s
            try:
                self._machine.request("walk", dict(self._walk.params), CLIENT, now_s)
            except HobnailError:
                self._walk = None  # a fault took the robot off its feet: the recording tells

    def _transfer(self, frame: Frame, now_s: float) -> None:
        driver, machine = self._driver, self._machine
        if frame.release:
            driver.release()
            return
        for _ in range(1 + machine.robot.safety.bus_retries):
            try:
                driver.write(frame.pulses_us)
            except BusError as error:
                detail = str(error)
            else:
                return
        machine.report("bus-error", now_s, detail)

    def _keep(self, frame: Frame, probe: Probe) -> None:
        if frame.tick is not None:
            self._tick = frame.tick
        powered = frame.state not in NO_PULSES and any(pulse is not None for pulse in frame.pulses_us)
        self._ticks.append(self._tick)
        self._probes.append(probe)
        self._in_force.append((self._twist, self._posed, powered, str(frame.state)))
        self._faults.update(dict.fromkeys(self._machine.faults.names()))

    def _recording(self, disturbances: Disturbances, wall_s: float, controller_wall_s: float) -> Recording:
        ticks, probes, in_force = self._ticks, self._probes, self._in_force
        count = len(ticks)
        return Recording(
            robot=self._machine.robot,
            scenario=self._scenario,
            disturbances=disturbances,
            time_s=_stack([p.time_s for p in probes]),
            true_position_m=_stack([p.position_m for p in probes]),
            true_rotation=_stack([p.rotation for p in probes]),
            true_velocity_m_s=_stack([p.velocity_m_s for p in probes]),
            true_joints_rad=_stack([p.joints_rad for p in probes]),
            true_feet_m=_stack([p.feet_m for p in probes]),
            foot_force_n=_stack([p.foot_force_n for p in probes]),
            foot_slip_m_s=_stack([p.foot_slip_m_s for p in probes]),
            torque_nm=_stack([p.torque_nm for p in probes]),
            peak_torque_nm=_stack([p.peak_torque_nm for p in probes]),
            power_w=_stack([p.mean_power_w for p in probes]),
            supply_v=_stack([p.supply_v for p in probes]),
            trunk_touches=np.array([p.trunk_touches for p in probes], dtype=bool),
            joints_rad=_stack([t.joints_rad for t in ticks]).reshape(count, -1),
            stance=np.array([t.stance for t in ticks], dtype=bool),
            command=_stack([twist for twist, _, _, _ in in_force]),
            pose=_stack([t.pose for t in ticks]),
            velocity=_stack([t.velocity for t in ticks]),
            slowdown=_stack([t.slowdown for t in ticks]),
            height_m=_stack([t.height_m for t in ticks]),
            state=tuple(state for _, _, _, state in in_force),
            gait=tuple(t.gait for t in ticks),
            walking=np.array([t.walking for t in ticks], dtype=bool),
            posed=np.array([posed for _, posed, _, _ in in_force], dtype=bool),
            powered=np.array([powered for _, _, powered, _ in in_force], dtype=bool),
            clamped=sum(t.clamped for t in ticks),
            out_of_reach=sum(t.out_of_reach for t in ticks),
            lost_frames=self._driver.lost_frames,
            route_failure=self._route_failure,
            faults=tuple(self._faults),
            wall_s=wall_s,
            controller_wall_s=controller_wall_s,
        )


def _stack(values: Sequence[object]) -> Floats:
    return np.array(values, dtype=np.float64)
