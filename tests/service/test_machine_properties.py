"""The machine under any sequence of requests, faults, late ticks, hanging buses and restarts.

After every frame, the rig checks that no awake joint moved faster than its
servo may.  Here: nothing moves after a latched stop without a reset, a wake
and a fresh command; and every sequence can be ended, at rest or off.
"""

from __future__ import annotations

from dataclasses import replace

from hypothesis import event
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from hobnail.errors import HobnailError
from hobnail.robot import Robot
from hobnail.service.faults import KINDS, Severity
from hobnail.service.machine import Machine
from hobnail.service.states import LATCHED, NO_PULSES, State
from machine_rig import Rig
from robots import bramble, juniper

CLIENTS = st.integers(1, 3)
SPEEDS = st.sampled_from([0.0, 0.05, -0.15, 0.3, 5.0])


def hurried(robot: Robot) -> Robot:
    """The robot with shorter times, so that a sequence gets through more states."""
    safety = replace(robot.safety, lost_rest_s=2.0, idle_rest_s=4.0, wake_interval_s=0.03)
    return replace(robot, safety=safety)


class MachineLife(RuleBasedStateMachine):
    """One robot's service, over restarts."""

    @initialize(robot=st.sampled_from([juniper(), bramble()]))
    def start(self, robot: Robot) -> None:
        self.rig = Rig(hurried(robot))
        self.stopped = False  # a stop is latched, or was and nobody has woken the robot since
        self.woken = True
        self.fresh = True

    def ask(self, method: str, client: int, **params: object) -> bool:
        try:
            self.rig.machine.request(method, params, client, self.rig.now_s)
        except HobnailError:
            return False
        return True

    @rule(client=CLIENTS)
    def stand(self, client: int) -> None:
        if self.ask("stand", client):
            self.woken = True

    @rule(client=CLIENTS, vx=SPEEDS, vy=SPEEDS, yaw_rate=SPEEDS, ttl_s=st.sampled_from([0.05, 0.5, 10.0]))
    def walk(self, client: int, vx: float, vy: float, yaw_rate: float, ttl_s: float) -> None:
        if self.ask("walk", client, vx=vx, vy=vy, yaw_rate=yaw_rate, ttl_s=ttl_s):
            assert self.woken
            self.fresh = True

    @rule(client=CLIENTS)
    def rest(self, client: int) -> None:
        if self.ask("rest", client):
            self.woken = True

    @rule(client=CLIENTS)
    def off(self, client: int) -> None:
        self.ask("off", client)

    @rule(
        client=CLIENTS,
        height=st.sampled_from([0.09, 0.12, 0.17, 0.2]),
        roll=st.sampled_from([0.0, 0.15, -0.1]),
    )
    def posture(self, client: int, height: float, roll: float) -> None:
        self.ask("posture", client, height_m=height, roll_rad=roll)

    @rule(client=CLIENTS, index=st.integers(0, 3))
    def gait(self, client: int, index: int) -> None:
        gaits = self.rig.robot.gaits
        self.ask("gait", client, name=gaits[index % len(gaits)].name)

    @rule(client=CLIENTS, length=st.sampled_from([20, 200]))
    def route(self, client: int, length: int) -> None:
        if self.ask("route", client, steps=[{"forward_mm": length}, {"turn_deg": 10}]):
            assert self.woken
            self.fresh = True

    @rule(client=CLIENTS, category=st.sampled_from([0, 1]))
    def stop(self, client: int, category: int) -> None:
        assert self.ask("stop", client, category=category)
        self.latched()

    @rule(name=st.sampled_from(sorted(KINDS)), lasting=st.booleans())
    def fault(self, name: str, lasting: bool) -> None:
        self.rig.machine.report(name, self.rig.now_s, "injected", lasting=lasting)
        if KINDS[name].severity >= Severity.STOP:
            self.latched()

    @rule(name=st.sampled_from(sorted(KINDS)))
    def cause_gone(self, name: str) -> None:
        self.rig.machine.faults.over(name, self.rig.now_s)

    @rule(client=CLIENTS)
    def reset(self, client: int) -> None:
        before = self.rig.machine.state
        if self.ask("reset", client) and before in LATCHED:
            assert self.rig.machine.state is State.OFF

    @rule(client=CLIENTS)
    def client_goes(self, client: int) -> None:
        self.rig.machine.client_gone(client, self.rig.now_s)

    @precondition(lambda self: self.rig.machine.state in NO_PULSES | {State.RESTING, State.STANDING})
    @rule(client=CLIENTS, vx=st.sampled_from([0.1, -0.2]), yaw_rate=SPEEDS)
    def set_off(self, client: int, vx: float, yaw_rate: float) -> None:
        """A short cut to where most can go wrong."""
        self.ask("reset", client)
        if self.ask("stand", client):
            self.woken = True
            for _ in range(500):
                if self.rig.machine.state is State.STANDING:
                    break
                self.tick()
            self.walk(client, vx, 0.0, yaw_rate, 10.0)
            for _ in range(50):
                self.tick()

    @rule(ticks=st.integers(1, 30))
    def ticks(self, ticks: int) -> None:
        for _ in range(ticks):
            self.tick()

    @rule()
    def wait(self) -> None:
        for _ in range(200):
            self.tick()

    @rule(periods=st.integers(2, 100))
    def late_tick(self, periods: int) -> None:
        self.tick(periods)

    @rule(ticks=st.integers(1, 30))
    def bus_hangs(self, ticks: int) -> None:
        for _ in range(ticks):
            self.tick(advance=False)

    @rule(volts=st.sampled_from([4.8, 5.5, 6.0, 7.4]))
    def supply(self, volts: float) -> None:
        self.rig.machine.body.supply_v = volts

    @rule()
    def wait_for_boards(self) -> None:
        self.rig.machine.wake_blocked = "" if self.rig.machine.wake_blocked else "set-up"

    @rule()
    def restart(self) -> None:
        """The service dies (its pulses are released after it) and starts again."""
        rig = self.rig
        last = rig.machine.body.last_rad
        rig.machine = Machine(rig.robot, now_s=rig.now_s, last_joints_rad=last)
        rig.frame = None
        rig.states.append(State.OFF)
        self.woken = False
        self.fresh = False
        self.tick()

    @precondition(lambda self: self.rig.machine.state not in LATCHED)
    @rule()
    def power_down_ends_off(self) -> None:
        """What SIGTERM does, without ending the service."""
        self.rig.machine.power_down()
        self.rig.until(State.OFF, 15.0)

    def latched(self) -> None:
        self.stopped = True
        self.woken = False
        self.fresh = False

    def tick(self, periods: int = 1, *, advance: bool = True) -> None:
        rig = self.rig
        before = rig.frame
        frame = rig.tick(periods, advance=advance)
        event(frame.state)
        assert (frame.state in NO_PULSES) == frame.release
        if frame.state in (State.RISING, State.STANDING, State.WALKING, State.WAKING) and not self.woken:
            raise AssertionError(f"{frame.state} with no wake asked for since the stop")
        if frame.state is State.WALKING and not self.fresh and frame.tick is not None:
            assert frame.tick.velocity == (0.0, 0.0, 0.0), "walks without a fresh command"
        if not advance and before is not None and frame.state is before.state:
            assert frame.pulses_us == before.pulses_us

    @invariant()
    def consistent(self) -> None:
        machine = self.rig.machine
        assert (machine.stop_record is not None) == (machine.state in LATCHED)
        assert machine.goal in (State.OFF, State.RESTING, State.STANDING)
        told = machine.snapshot(self.rig.now_s)
        assert told["state"] == machine.state

    def teardown(self) -> None:
        """Left alone, every sequence ends off, or stopped with no pulses."""
        rig = self.rig
        rig.machine.wake_blocked = ""
        rig.machine.power_down("end of the test")
        for _ in range(1500):
            frame = rig.tick()
        assert frame.release
        assert rig.machine.counters["clamped"] == 0


TestMachineLife = MachineLife.TestCase
