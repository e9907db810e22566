"""Waits, from outside, until the running robot is in a state; times in s, clock and sleep injected."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Collection
from typing import TYPE_CHECKING, Any

from hobnail.errors import FaultError, ServiceTimeoutError, StoppedError

if TYPE_CHECKING:
    from hobnail.service.client import Client

POLL_S = 0.1


def wait_for_state(
    client: Client,
    wanted: Collection[str],
    within_s: float,
    *,
    clock: Callable[[], float] = time.monotonic,
    sleep: Callable[[float], None] = time.sleep,
    tell: bool = True,
) -> dict[str, Any]:
    """The first snapshot in one of the wanted states; `tell`: each change goes to stderr.

    Raises StoppedError when a stop comes between, FaultError when the robot
    turns to rest because of a fault, ServiceTimeoutError after `within_s`.
    """
    started_s = clock()
    shown = ""
    while True:
        snapshot: dict[str, Any] = client.state()
        state = str(snapshot["state"])
        if state != shown and tell:
            print(state, file=sys.stderr, flush=True)
        shown = state
        if state in wanted:
            return snapshot
        if snapshot["stop"]["latched"]:
            reason = snapshot.get("first_cause") or snapshot["stop"]["reason"] or "no reason given"
            raise StoppedError(f"stopped while waiting ({reason}): look at the robot, then `hobnail reset`")
        for fault in snapshot["faults"]:
            if fault["severity"] == "rest" and state not in ("waking", "rising"):
                raise FaultError(f"{fault['name']}: {fault['message']}; next: {fault['next']}")
        if clock() - started_s > within_s:
            asked = " or ".join(sorted(wanted))
            raise ServiceTimeoutError(
                f"still {state} after {within_s:g} s, wanted {asked}; see `hobnail state`"
            )
        sleep(POLL_S)
