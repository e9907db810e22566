"""A snapshot as `state` tells it, made by the real machine in mid-walk, for whatever draws or sums up."""

from __future__ import annotations

import copy
import json
from functools import cache
from typing import Any

from hobnail.service.machine import Machine
from hobnail.service.timing import Lateness
from robots import juniper


def snapshot(**changes: Any) -> dict[str, Any]:
    """A robot that walks, with some values changed."""
    return {**copy.deepcopy(json.loads(_walking())), **changes}


def fault(name: str = "supply-low", severity: str = "rest", **changes: Any) -> dict[str, Any]:
    """A fault as `state` tells it."""
    told = {
        "name": name,
        "severity": severity,
        "since_s": 1.0,
        "count": 1,
        "message": "the servo supply is low; the robot lies down and goes off",
        "next": "charge or change the battery; `stand` is taken again when the voltage is back",
    }
    return {**told, **changes}


@cache
def _walking() -> str:
    robot = juniper()
    machine = Machine(robot, now_s=0.0)
    late = Lateness()
    machine.instruments["timing"] = lambda: {
        "period_s": robot.period_s,
        "ticks": 1234,
        "skipped": 2,
        "lateness_us": late.describe(),
    }
    machine.instruments["driver"] = lambda: {
        "name": "simulated",
        "simulated": True,
        "frame_hz": {"main": 100.0},
    }
    now_s = 0.0
    machine.request("stand", {}, 1, now_s)
    while machine.state != "walking":
        now_s += robot.period_s
        machine.tick(now_s, robot.period_s)
        if machine.state == "standing":
            machine.request("walk", {"vx": 0.2, "yaw_rate": 0.3, "ttl_s": 5.0}, 1, now_s)
    for _ in range(100):
        now_s += robot.period_s
        machine.tick(now_s, robot.period_s)
    return json.dumps(machine.snapshot(now_s))
