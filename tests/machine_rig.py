"""A machine on an injected clock, with every frame that it gives checked against the joints' speed limits.

Checks nothing of states: the tests do.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

from hobnail.robot import Robot
from hobnail.service.machine import Machine
from hobnail.service.states import Frame, State
from robots import juniper

SLACK = 1e-9  # rad; rounding


def largest_steps_rad(robot: Robot, dt_s: float, supply_v: float) -> tuple[float, ...]:
    """How far each joint may move in `dt_s`: its servo's usable speed at that voltage."""
    return tuple(
        joint.servo.speed_rad_s * joint.servo.usable_speed * supply_v / joint.servo.rated_v * dt_s
        for joint in robot.joints
    )


class Rig:
    """Ticks a machine and keeps what came out.

    `moved_rad` is the sum of all joint movements seen, `woken` the joints that
    got their first pulse, a list a tick in which there were any.
    """

    def __init__(self, robot: Robot, last_joints_rad: Sequence[float] | None = None) -> None:
        self.robot = robot
        self.now_s = 100.0
        self.machine = Machine(robot, now_s=self.now_s, last_joints_rad=last_joints_rad)
        self.frame: Frame | None = None
        self.states: list[State] = [State.OFF]
        self.woken: list[tuple[float, list[int]]] = []
        self.moved_rad = 0.0
        self.tick()

    @property
    def state(self) -> State:
        return self.machine.state

    def ask(self, method: str, client: int = 1, **params: object) -> object:
        """A request, with its parameters as the server hands them over."""
        return self.machine.request(method, params, client, self.now_s)

    def tick(self, periods: int = 1, *, advance: bool = True) -> Frame:
        """One tick; `periods` more than 1: some were skipped before it."""
        dt_s = self.robot.period_s
        self.now_s += periods * dt_s
        step_s = min(periods, 2) * dt_s
        frame = self.machine.tick(self.now_s, step_s, advance=advance)
        self._check(frame, step_s)
        self.frame = frame
        if frame.state is not self.states[-1]:
            self.states.append(frame.state)
        return frame

    def go(self, seconds: float, each: Callable[[], object] | None = None) -> State:
        """Tick for so long; `each` is called before each tick."""
        for _ in range(round(seconds / self.robot.period_s)):
            if each is not None:
                each()
            self.tick()
        return self.state

    def until(self, state: State, within_s: float = 30.0) -> float:
        """Tick until that state is reached; the seconds it took."""
        began_s = self.now_s
        while self.state is not state:
            assert self.now_s - began_s < within_s, f"still {self.state} after {within_s} s, wanted {state}"
            self.tick()
        return self.now_s - began_s

    def expect(self, state: State) -> None:
        """Assert that the machine is in that state."""
        assert self.state is state, f"{self.state}, wanted {state}"

    def stand(self) -> float:
        """Wake and stand; the seconds it took."""
        self.ask("stand")
        return self.until(State.STANDING)

    def walk(self, vx: float = 0.15, **params: object) -> State:
        """Stand and get into a steady walk, commanded for 10 s by client 1."""
        if self.state not in (State.STANDING, State.WALKING):
            self.stand()
        self.machine.request("walk", {"vx": vx, "ttl_s": 10.0, **params}, 1, self.now_s)
        return self.go(1.5)

    def _check(self, frame: Frame, step_s: float) -> None:
        before = self.frame
        joints = self.robot.joints
        assert len(frame.pulses_us) == len(frame.joints_rad) == len(joints)
        if frame.release:
            assert all(pulse is None for pulse in frame.pulses_us)
        for pulse, joint in zip(frame.pulses_us, joints, strict=True):
            low, high = joint.pulse_limits_us
            assert pulse is None or low <= pulse <= high
        if before is None:
            return
        limits = largest_steps_rad(self.robot, step_s, self.machine.body.supply_v)
        woken = []
        for index, (old, new, limit) in enumerate(
            zip(before.joints_rad, frame.joints_rad, limits, strict=True)
        ):
            if new is None:
                continue
            if old is None:
                woken.append(index)
                continue
            self.moved_rad += abs(new - old)
            assert abs(new - old) <= limit + SLACK, (
                f"{joints[index].name} moved {new - old:.4f} rad in {step_s:.3f} s, allowed {limit:.4f}, "
                f"{before.state} -> {frame.state}"
            )
        if woken:
            self.woken.append((self.now_s, woken))


WAYS_IN: dict[str, Callable[[Rig], object]] = {
    "off": lambda _rig: None,
    "waking": lambda rig: (rig.ask("stand"), rig.go(0.5)),
    "resting": lambda rig: (rig.ask("rest"), rig.until(State.RESTING)),
    "rising": lambda rig: (rig.ask("stand"), rig.until(State.RISING), rig.go(0.5)),
    "standing": lambda rig: rig.stand(),
    "walking": lambda rig: rig.walk(),
    "lowering": lambda rig: (rig.stand(), rig.ask("rest"), rig.go(0.5)),
    "stopping": lambda rig: (rig.walk(), rig.ask("stop", category=1), rig.go(0.3)),
    "stopped": lambda rig: (rig.walk(), rig.ask("stop", category=0), rig.go(0.1)),
}


def in_state(name: str, robot: Robot | None = None) -> Rig:
    """A rig brought into a state, by requests alone; juniper unless told otherwise."""
    rig = Rig(robot or juniper())
    WAYS_IN[name](rig)
    assert rig.state == name
    return rig
