"""The state machine: requests, faults and time in, one frame of pulses a tick out; SI units.

Pure: time is an argument; nothing is read, written or logged here.
`hobnail.service.states` has the tables, `requests` what clients may ask,
`body` the joints; `hobnail.service.loop` calls `tick`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING

from hobnail.controller import Controller, Tick
from hobnail.errors import FaultError, HobnailError, StateError
from hobnail.robot import Robot
from hobnail.service.body import Body
from hobnail.service.commander import Commander
from hobnail.service.faults import Faults, Severity, run_each
from hobnail.service.overload import LoadWatch
from hobnail.service.requests import Params, Requests
from hobnail.service.snapshot import snapshot
from hobnail.service.states import (
    CARRYING,
    LOCAL_CLIENT,
    LYING,
    NEXT,
    NO_PULSES,
    ON_FEET,
    STILL,
    TRANSITIONS,
    Command,
    Frame,
    Passage,
    State,
    Stop,
)

if TYPE_CHECKING:
    from hobnail.service.route import RouteRunner
    from hobnail.service.route_steps import Step


class Machine:
    """One robot's states.  Attributes are for reading; change goes through the methods.

    `goal` is the state that the robot is on its way to: off, resting or standing.
    `wake_blocked` is set by the loop while the boards are not set up: why waking waits.
    `instruments` are read for the snapshot: name -> a callable giving what `state` shows.
    `passages` are the changes of state from the tick before up to the newest one, as many
    as there were: whoever compares states would miss a stop that was reset between ticks.
    `on_cut` is called at once when the pulses are cut, before the next frame says so.
    """

    def __init__(
        self,
        robot: Robot,
        *,
        now_s: float,
        last_joints_rad: Sequence[float] | None = None,
        instruments: Mapping[str, Callable[[], object]] | None = None,
    ) -> None:
        """`last_joints_rad` (flat, in the order of `robot.joints`) is where the joints were
        last commanded to, None when that is not known."""
        self.robot = robot
        self.state = State.OFF
        self.since_s = self.started_s = now_s
        self.goal = State.OFF
        self.body = Body(robot, last_joints_rad)
        self.faults = Faults()
        self.commander = Commander()
        self.command: Command | None = None
        self.route: RouteRunner | None = None
        self.stop_record: Stop | None = None
        self.setups = 0
        self.wake_blocked = ""
        self.closing = ""
        self.instruments = dict(instruments or {})
        self.counters = {"clamped": 0, "out_of_reach": 0, "slowed": 0}
        self.on_cut: Callable[[], object] | None = None
        self.passages: tuple[Passage, ...] = ()
        self._passing: list[Passage] = []
        self._own_reason = ""  # why the robot lies down where nobody asked for that
        self._load = LoadWatch(robot)
        self._requests = Requests(self)
        self._route_client = LOCAL_CLIENT
        self._active_s = now_s
        self._lost_s: float | None = None

    # In from outside

    def tick(self, now_s: float, dt_s: float, *, advance: bool = True) -> Frame:
        """One tick: judge by the clock, move by `dt_s`, and give the frame to be sent.

        `advance` False: the last frame has not reached the boards yet, so nothing
        moves on; only time and stops are judged.
        """
        self._judge(now_s)
        if advance:
            self._advance(now_s, dt_s)
        self.passages = tuple(self._passing)
        self._passing.clear()
        body = self.body
        return Frame(
            self.state, body.pulses_us, self.state in NO_PULSES, body.joints_rad, self.setups, body.tick
        )

    def request(self, method: str, params: Params, client_id: int, now_s: float) -> object:
        """Answer a client's request.  Raises HobnailError."""
        return self._requests.answer(method, params, client_id, now_s)

    def client_gone(self, client_id: int, now_s: float) -> None:
        """A client's connection ended: what it commanded ends with it."""
        self._requests.streams.let_go(client_id)
        walked = self.command is not None and self.command.client_id == client_id and self.command.moves
        if walked or (self.routing and self._route_client == client_id):
            self.report(
                "commander-lost", now_s, f"client {client_id} went away while the robot walked for it"
            )
        self.commander.drop(client_id)

    def report(self, name: str, now_s: float, detail: str = "", *, lasting: bool = False) -> None:
        """A fault occurred; act as its severity asks.  `lasting`: until `faults.over`."""
        severity = self.faults.report(name, now_s, detail, lasting=lasting).kind.severity
        if severity is Severity.CUT:
            self.stop(0, f"fault {name}", now_s)
        elif severity is Severity.STOP:
            self.stop(1, f"fault {name}", now_s)
        elif severity is Severity.REST:
            self.power_down(reason=f"fault {name}")
        elif severity is Severity.HOLD:
            if name == "commander-lost" and self._lost_s is None:
                self._lost_s = now_s
            self._halt()

    def watch(self, name: str, is_there: bool, now_s: float, detail: str = "") -> None:
        """A fault whose cause is looked at every tick: reported when it comes, over when it goes."""
        if not is_there:
            self.faults.over(name, now_s)
        elif not self.faults.is_lasting(name):
            self.report(name, now_s, detail, lasting=True)

    def snapshot(self, now_s: float) -> dict[str, object]:
        """Everything that `state` and `watch` tell; JSON-able."""
        return snapshot(self, now_s)

    # Commands, once admitted

    @property
    def controller(self) -> Controller:
        """What walks, when the robot is on its feet."""
        return self.body.controller

    @property
    def routing(self) -> bool:
        """A route is being walked."""
        return self.route is not None and not self.route.done

    def obey(self, command: Command, now_s: float) -> None:
        """Keep to a walk command, already given to the controller, until its time is up."""
        self.command = command
        self.commanded(now_s, idle=not command.moves)

    def head_for(self, goal: State, now_s: float) -> None:
        """Be on the way to off, resting or standing; whatever was walked is over."""
        self.goal = goal
        self._own_reason = ""
        self._halt()
        self.commanded(now_s)

    def commanded(self, now_s: float, *, idle: bool = False) -> None:
        """A fresh command was taken; an `idle` one does not keep the robot from lying down."""
        self.faults.commanded(now_s)
        self._lost_s = None
        if not idle:
            self._active_s = now_s

    def start_route(self, steps: Sequence[Step], client_id: int, now_s: float) -> None:
        """Walk a list of steps.  Raises HobnailError, as the `route` request does."""
        from hobnail.service.route import RouteRunner  # seldom needed

        runner = RouteRunner(steps, self.robot)
        self._requests.admit("route", client_id, now_s, math.inf)
        self.command = None
        self.route, self._route_client = runner, client_id
        self.commanded(now_s)

    # Stops

    def stop(self, category: int, reason: str, now_s: float) -> None:
        """Stop and latch: 0 cuts every pulse at once, 1 plants the feet, lowers, then cuts.

        Never refused.  A stop that is latched already keeps its reason and its
        time; a graver category takes its place.
        """
        if self.state is State.STOPPED:
            return
        if self.stop_record is None:
            self.stop_record = Stop(category, reason, now_s, now_s + self.robot.safety.crouch_s)
        elif category < self.stop_record.category:
            self.stop_record = self.stop_record.graver(category)
        self.goal = State.OFF
        self._own_reason = ""
        errors = self._cut(now_s) if category == 0 else []
        errors += run_each((self._halt, self.commander.drop, lambda: self._requests.streams.hold_all(now_s)))
        if category == 1:
            errors += self._stop_in_control(now_s)
        for error in errors:
            self.faults.report("internal", now_s, f"while stopping: {error!r}")

    def reset(self, now_s: float) -> None:
        """Unlatch; moves nothing.  Raises StateError while stopping, FaultError while the
        cause of a stop lasts."""
        if self.state is State.STOPPING:
            raise StateError(f"reset: the stop is still under way; {NEXT[self.state]}")
        left = self.faults.reset(now_s)
        if self.state is State.STOPPED:
            for fault in left:
                if fault.kind.severity >= Severity.STOP:
                    raise FaultError(f"reset: {fault.kind.message}; {fault.kind.next}")
            self.stop_record = None
            self.setups += 1
            self.body.renew()
            self._enter(State.OFF, now_s)

    def power_down(self, closing: str = "", *, reason: str = "") -> None:
        """Lie down, then go off, for a `reason`; with `closing`, which is one, no request to move is
        taken any more."""
        self.closing = self.closing or closing
        self._own_reason = closing or reason or self._own_reason
        self.goal = State.OFF
        self._halt()
        self.commander.drop()

    # Time

    def _judge(self, now_s: float) -> None:
        command, safety = self.command, self.robot.safety
        if command is not None and now_s - command.received_s >= command.ttl_s:
            self.command = None
            if command.moves:
                age_s = now_s - command.received_s
                self.report(
                    "commander-lost", now_s, f"nothing from client {command.client_id} for {age_s:.2f} s"
                )
        self.faults.update(now_s)
        if self.routing or self.state not in STILL:
            self._active_s = now_s
        if self._lost_s is not None and now_s - self._lost_s >= safety.lost_rest_s:
            self._lost_s = None
            if self.goal is State.STANDING:
                self.goal = State.RESTING
                self._own_reason = f"commander lost for {safety.lost_rest_s:g} s"
        if self.goal is not State.OFF and now_s - self._active_s >= safety.idle_rest_s:
            self.power_down(reason=f"no command for {safety.idle_rest_s:g} s")
        if self.state is State.STOPPING and self.stop_record and now_s >= self.stop_record.until_s:
            self._cut(now_s)

    def _advance(self, now_s: float, dt_s: float) -> None:
        body = self.body
        self._steer(now_s)
        carried = body.tick if self.state not in LYING else None
        for name in self._load.update(carried, dt_s, body.supply_v):
            self.report("overload", now_s, name)
        if self.state in NO_PULSES:
            return
        if body.is_waking:
            if body.wake(dt_s):
                self._woken(now_s)
            return
        if self.state is State.STOPPING and body.tick is not None and body.tick.walking:
            self._crouch(now_s)  # what is left of the time, once the feet are down
        tick = body.carry(dt_s)
        self._count(tick, now_s)
        self._arrive(tick, now_s)
        if self.routing and self.state in ON_FEET:
            self._walk_route(tick, dt_s, now_s)

    def _steer(self, now_s: float) -> None:
        """Set out for the goal."""
        state, goal = self.state, self.goal
        if state is State.OFF and goal is not State.OFF and not self.wake_blocked:
            self.body.begin_waking()
            self._enter(State.WAKING, now_s)
        elif goal is State.OFF and (
            state is State.RESTING or (state is State.WAKING and not self.body.all_awake)
        ):
            self._enter(State.OFF, now_s)
            self.body.sleep()
        elif goal is State.STANDING and state in (State.RESTING, State.LOWERING):
            self.controller.rise()
            self._enter(State.RISING, now_s)
        elif goal is not State.STANDING and state in CARRYING - {State.LOWERING}:
            self.controller.lower()
            self._enter(State.LOWERING, now_s)

    def _woken(self, now_s: float) -> None:
        if self.state is State.STOPPING:
            self._cut(now_s)
        else:
            self._enter(State.RESTING, now_s)

    def _arrive(self, tick: Tick, now_s: float) -> None:
        """Take the state that the tick shows."""
        state = self.state
        if state is State.RISING and tick.settled:
            self._enter(State.STANDING, now_s)
        elif state is State.LOWERING and tick.settled:
            self._enter(State.RESTING, now_s)
        elif state is State.STOPPING and tick.settled:
            self._cut(now_s)
        elif state is State.STANDING and tick.walking:
            self._enter(State.WALKING, now_s)
        elif state is State.WALKING and not tick.walking:
            self._enter(State.STANDING, now_s)

    def _walk_route(self, tick: Tick, dt_s: float, now_s: float) -> None:
        route = self.route
        assert route is not None
        try:
            action = route.update(tick, dt_s)
            if action.gait is not None:
                self.controller.gait(action.gait)
            if action.posture:
                self.controller.posture(**action.posture)  # type: ignore[arg-type]
            self.controller.walk(*action.twist)
        except HobnailError as error:
            self._halt()
            self.report("route-failed", now_s, str(error))
            return
        if route.done:
            self.controller.stand()
            self.commander.drop(self._route_client)
            if route.failure:
                self.report("route-failed", now_s, route.failure)

    def _count(self, tick: Tick, now_s: float) -> None:
        if tick.slowdown < 1.0:
            self.counters["slowed"] += 1
        if tick.clamped:
            self.counters["clamped"] += tick.clamped
            self.report("joint-clamped", now_s, f"{tick.clamped} in one tick")
        if tick.out_of_reach:
            self.counters["out_of_reach"] += tick.out_of_reach
            self.report("out-of-reach", now_s, f"{tick.out_of_reach} feet in one tick")

    # Small steps

    def _halt(self) -> None:
        """No command and no route any more; feet are planted."""
        self.command = None
        if self.routing:
            self.route = None
            self.commander.drop(self._route_client)
        if self.state in ON_FEET:
            self.controller.stand()

    def _stop_in_control(self, now_s: float) -> list[Exception]:
        """Begin to lie down where there is something to lower; else, or failing that, cut."""
        if self.state is State.STOPPING:
            return []
        errors: list[Exception] = []
        if self.state in CARRYING:
            errors = run_each((lambda: self._crouch(now_s),))
        if not errors and (self.state in CARRYING or (self.state is State.WAKING and self.body.all_awake)):
            self._enter(State.STOPPING, now_s)  # joints that are awake go on to the rest posture
            return []
        return errors + self._cut(now_s)

    def _crouch(self, now_s: float) -> None:
        """Plant the feet and be down just before the pulses are cut."""
        assert self.stop_record is not None
        spare_s = 3.0 * self.robot.period_s
        self.controller.lower(within_s=max(spare_s, self.stop_record.until_s - now_s - spare_s))

    def _cut(self, now_s: float) -> list[Exception]:
        """No pulse any more, and latched."""
        errors = run_each((self.on_cut,)) if self.on_cut is not None else []
        self._enter(State.STOPPED, now_s)
        self.body.sleep()
        return errors

    def _enter(self, state: State, now_s: float) -> None:
        if state not in TRANSITIONS[self.state]:
            raise RuntimeError(f"no way from {self.state} to {state}")
        reason = self.stop_record.reason if self.stop_record else self._own_reason
        self._passing.append(Passage(self.state, state, reason))
        self.state, self.since_s = state, now_s
