"""What each request does to the machine, and when it is refused; SI units.

Form and range of the parameters are `hobnail.service.methods`'s to check, a
posture's bounds the controller's.  Keeps no state but which clients hold a
walk command down.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any, TypeAlias

from hobnail.errors import CommandError, FaultError, StateError, StoppedError
from hobnail.service.faults import Severity
from hobnail.service.methods import METHODS, ParamsError
from hobnail.service.snapshot import describe, snapshot
from hobnail.service.states import ALLOWED, LATCHED, NEXT, Command, State
from hobnail.service.streams import Streams

if TYPE_CHECKING:
    from hobnail.service.machine import Machine

Params: TypeAlias = dict[str, object] | list[object] | None
Values: TypeAlias = dict[str, Any]  # by name, checked

# The severities whose faults forbid a request.
_FORBIDDEN_BY: dict[str, tuple[Severity, ...]] = {
    "walk": (Severity.HOLD, Severity.REST),
    "route": (Severity.HOLD, Severity.REST),
    "stand": (Severity.REST,),
}


class Requests:
    """The handlers, by the name of the request."""

    def __init__(self, machine: Machine) -> None:
        self.streams = Streams()
        self._machine = machine
        self._handlers: dict[str, Callable[[Values, int, float], object]] = {
            "walk": self._walk,
            "stand": self._stand,
            "rest": self._rest,
            "off": self._off,
            "posture": self._posture,
            "gait": self._gait,
            "route": self._route,
            "stop": self._stop,
            "reset": self._reset,
            "state": lambda _values, _client, now_s: snapshot(machine, now_s),
            "describe": lambda _values, _client, _now_s: describe(machine),
        }

    def answer(self, method: str, params: Params, client_id: int, now_s: float) -> object:
        """Carry a request out.

        A dict of `params` is taken as checked already, as the server hands it
        over; anything else is checked here.  Raises HobnailError.
        """
        try:
            handler = self._handlers[method]
            values = params if isinstance(params, dict) else METHODS[method].check(params)
        except KeyError:
            known = ", ".join(self._handlers)
            raise CommandError(f"there is no request {method[:40]!r}; there are {known}") from None
        except ParamsError as error:
            raise CommandError(f"{method}: {error}") from error
        return handler(values, client_id, now_s)

    def admit(
        self, method: str, client_id: int, now_s: float, ttl_s: float | None = None, *, fresh: bool = True
    ) -> None:
        """Raise unless state, faults and claim allow the request; then take the claim for `ttl_s`."""
        machine = self._machine
        state, next_step = machine.state, NEXT[machine.state] or "send `stand` first"
        if state in LATCHED:
            why = machine.stop_record.reason if machine.stop_record else ""
            raise StoppedError(f"{method}: stopped: {why}; {next_step}")
        if machine.closing:
            raise StateError(f"{method}: the service is ending: {machine.closing}; start it again")
        on_the_way_down = method in ("walk", "route", "posture") and machine.goal is not State.STANDING
        if state not in ALLOWED[method] or on_the_way_down:
            raise StateError(f"{method}: the robot is {state}; {next_step}")
        if not fresh:
            raise StateError(
                f"{method}: this client has been sending without a pause since before the robot woke; "
                "let go first: send zero velocities or `stand`, then walk"
            )
        forbidden_by = _FORBIDDEN_BY.get(method, ())
        if method == "rest" and state is State.OFF:
            forbidden_by = _FORBIDDEN_BY["stand"]
        fault = machine.faults.blocking(forbidden_by)
        if fault is not None:
            raise FaultError(
                f"{method}: {fault.kind.message}; {fault.kind.next}; it clears {fault.kind.clears.value}"
            )
        machine.commander.take(
            client_id, now_s, machine.robot.safety.command_ttl_s if ttl_s is None else ttl_s
        )

    def _walk(self, values: Values, client_id: int, now_s: float) -> object:
        machine = self._machine
        vx, vy, yaw_rate = values.get("vx", 0.0), values.get("vy", 0.0), values.get("yaw_rate", 0.0)
        pivot = values.get("pivot", (0.0, 0.0))
        ttl_s = values.get("ttl_s", machine.robot.safety.command_ttl_s)
        command = Command(vx, vy, yaw_rate, pivot, now_s, ttl_s, client_id)
        asleep = machine.state in LATCHED or machine.state is State.OFF
        fresh = self.streams.note(client_id, now_s, ttl_s, moves=command.moves, asleep=asleep)
        self._refuse_during_route("walk")
        self.admit("walk", client_id, now_s, ttl_s, fresh=fresh)
        machine.controller.walk(vx, vy, yaw_rate, pivot)
        machine.obey(command, now_s)
        return self._answer()

    def _stand(self, _values: Values, client_id: int, now_s: float) -> object:
        self.admit("stand", client_id, now_s)
        self.streams.let_go(client_id)
        self._machine.head_for(State.STANDING, now_s)
        return self._answer()

    def _rest(self, _values: Values, client_id: int, now_s: float) -> object:
        self.admit("rest", client_id, now_s)
        self._machine.head_for(State.RESTING, now_s)
        return self._answer()

    def _off(self, _values: Values, client_id: int, now_s: float) -> object:
        self.admit("off", client_id, now_s)
        self._machine.head_for(State.OFF, now_s)
        return self._answer()

    def _posture(self, values: Values, client_id: int, now_s: float) -> object:
        self._refuse_during_route("posture")
        self.admit("posture", client_id, now_s)
        self._machine.controller.posture(**values)
        self._machine.commanded(now_s)
        return self._answer()

    def _gait(self, values: Values, client_id: int, now_s: float) -> object:
        self._refuse_during_route("gait")
        self.admit("gait", client_id, now_s)
        self._machine.controller.gait(values["name"])
        self._machine.commanded(now_s)
        return self._answer()

    def _route(self, values: Values, client_id: int, now_s: float) -> object:
        machine = self._machine
        if "cancel" in values:
            if not machine.routing:
                raise StateError("route: none is being walked, so there is nothing to cancel")
            # It only ends motion: like `stop`, it needs no claim, and the route's own ends with it.
            machine.head_for(State.STANDING, now_s)
        else:
            from hobnail.service.route_file import steps_from_json  # slow to import, seldom needed

            self._refuse_during_route("route")
            steps = steps_from_json(values["steps"], machine.robot)
            machine.start_route(steps, client_id, now_s)
        return self._answer()

    def _stop(self, values: Values, client_id: int, now_s: float) -> object:
        reason = values.get("reason") or "asked for"
        self._machine.stop(values.get("category", 1), f"{reason} (client {client_id})", now_s)
        return self._answer()

    def _reset(self, _values: Values, _client_id: int, now_s: float) -> object:
        self._machine.reset(now_s)
        return self._answer()

    def _answer(self) -> dict[str, object]:
        return {"state": str(self._machine.state), "goal": str(self._machine.goal)}

    def _refuse_during_route(self, method: str) -> None:
        if self._machine.routing:
            raise StateError(f"{method}: a route is being walked; cancel it, or send `stand`, first")
