"""A route that the service walks by itself, as `hobnail run --route` has one: stand, walk, lie down, off.

Knows the machine's requests; no clock, no socket.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from hobnail.errors import EX_TEMPFAIL, HobnailError
from hobnail.service.machine import Machine
from hobnail.service.states import LOCAL_CLIENT, State

if TYPE_CHECKING:
    from hobnail.service.route_steps import Step


class Errand:
    """One route.  `exit_code` is 0 once every step was walked, 75 as long as not."""

    def __init__(self, steps: Sequence[Step]) -> None:
        self.exit_code = EX_TEMPFAIL
        self._steps = steps
        self._next = self._wake

    def update(self, machine: Machine, now_s: float) -> None:
        """Go on with it; once a tick."""
        if machine.closing:
            return
        stopped = any(after is State.STOPPED for _, after, _ in machine.passages)  # and reset since
        if stopped or machine.stop_record is not None:
            machine.power_down("the route was stopped")
            return
        try:
            self._next(machine, now_s)
        except HobnailError as error:
            machine.power_down(f"the route cannot be walked: {error}")

    def _wake(self, machine: Machine, now_s: float) -> None:
        if not machine.wake_blocked:
            machine.request("stand", {}, LOCAL_CLIENT, now_s)
            self._next = self._begin

    def _begin(self, machine: Machine, now_s: float) -> None:
        if machine.state is State.STANDING:
            machine.start_route(self._steps, LOCAL_CLIENT, now_s)
            self._next = self._watch

    def _watch(self, machine: Machine, now_s: float) -> None:
        del now_s
        if machine.route is None:
            machine.power_down("the route was given up")
        elif machine.route.failure:
            machine.power_down(f"the route failed: {machine.route.failure}")
        elif machine.route.done:
            self.exit_code = 0
            machine.power_down("the route is walked")
