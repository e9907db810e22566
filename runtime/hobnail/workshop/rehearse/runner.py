"""Runs a scenario: controller, driver and physics in lock-step, one tick at a time; keeps what happened.

The loop has no clock of its own: each tick the controller computes, the driver
gets the pulses, and physics runs on by the robot's period.  A lost frame is
taken as the running service takes it: counted, and the next one tried.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from hobnail.controller import Controller, Tick
from hobnail.robot import Robot
from hobnail.workshop.rehearse.backend import RehearsalDriver
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.plant import Plant, Probe
from hobnail.workshop.rehearse.scenarios import Command, Scenario
from hobnail_drivers.errors import BusError

Floats = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]


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
    gait: tuple[str, ...]
    walking: Flags  # (n,)
    posed: Flags  # (n,)
    powered: Flags  # (n,)
    clamped: int
    out_of_reach: int
    lost_frames: int
    wall_s: float
    controller_wall_s: float


def run(robot: Robot, scenario: Scenario, disturbances: Disturbances | None = None) -> Recording:
    """Rehearse `scenario`.

    Raises CommandError (a command or a disturbance out of range), HobnailError
    (the physics became unstable), DriverUnavailableError (no physics engine).
    """
    disturbances = disturbances or Disturbances()
    plant = Plant(robot, disturbances)
    driver = RehearsalDriver(robot, plant)
    controller = Controller(robot)
    if scenario.gait is not None:
        controller.gait(scenario.gait)
    period_s = robot.period_s
    tick = controller.tick(period_s)
    targets = driver.targets_rad(tick.pulses_us)
    driver.open()
    plant.place([target for target in targets if target is not None])
    log = _Log()
    waiting = list(scenario.commands)
    started = time.perf_counter()
    computing = 0.0
    for index in range(round(scenario.duration_s / period_s)):
        now_s = index * period_s
        while waiting and waiting[0].at_s <= now_s + 1e-9:
            log.obey(waiting.pop(0), controller)
        before = time.perf_counter()
        tick = controller.tick(period_s)
        computing += time.perf_counter() - before
        if log.powered:
            try:
                driver.write(tick.pulses_us)
            except BusError:
                pass  # counted by the driver; the next tick's frame follows
        else:
            driver.release()
        driver.advance(period_s)
        if robot.supply.monitor_bus is not None:
            controller.supply_v = plant.supply_v
        log.keep(tick, plant.probe())
    wall_s = time.perf_counter() - started
    lost = driver.lost_frames
    driver.close()
    return log.recording(robot, scenario, disturbances, lost, wall_s, computing)


class _Log:
    """Collects ticks and probes, and the commands in force."""

    def __init__(self) -> None:
        self.powered = True
        self._twist = (0.0, 0.0, 0.0)
        self._posed = False
        self._ticks: list[Tick] = []
        self._probes: list[Probe] = []
        self._in_force: list[tuple[tuple[float, float, float], bool, bool]] = []

    def obey(self, command: Command, controller: Controller) -> None:
        """Give a command to the controller; without `apply` the pulses end."""
        if command.apply is None:
            self.powered = False
        else:
            command.apply(controller)
        if command.twist is not None:
            self._twist = command.twist
        if command.posed is not None:
            self._posed = command.posed

    def keep(self, tick: Tick, probe: Probe) -> None:
        """One tick's worth."""
        self._ticks.append(tick)
        self._probes.append(probe)
        self._in_force.append((self._twist, self._posed, self.powered))

    def recording(
        self,
        robot: Robot,
        scenario: Scenario,
        disturbances: Disturbances,
        lost_frames: int,
        wall_s: float,
        controller_wall_s: float,
    ) -> Recording:
        """All of it as arrays."""
        ticks, probes = self._ticks, self._probes
        count = len(ticks)
        return Recording(
            robot=robot,
            scenario=scenario,
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
            command=_stack([twist for twist, _, _ in self._in_force]),
            pose=_stack([t.pose for t in ticks]),
            velocity=_stack([t.velocity for t in ticks]),
            slowdown=_stack([t.slowdown for t in ticks]),
            height_m=_stack([t.height_m for t in ticks]),
            gait=tuple(t.gait for t in ticks),
            walking=np.array([t.walking for t in ticks], dtype=bool),
            posed=np.array([posed for _, posed, _ in self._in_force], dtype=bool),
            powered=np.array([powered for _, _, powered in self._in_force], dtype=bool),
            clamped=sum(t.clamped for t in ticks),
            out_of_reach=sum(t.out_of_reach for t in ticks),
            lost_frames=lost_frames,
            wall_s=wall_s,
            controller_wall_s=controller_wall_s,
        )


def _stack(values: Sequence[object]) -> Floats:
    return np.array(values, dtype=np.float64)
