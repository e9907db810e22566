"""What `state` and `describe` tell about the running robot, as JSON-able dicts; SI units.

Reads the machine; changes nothing.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from hobnail.service import methods

if TYPE_CHECKING:
    from hobnail.service.machine import Machine


def snapshot(machine: Machine, now_s: float) -> dict[str, object]:
    """The robot now; `since_s` and the like are seconds on the service's monotonic clock."""
    tick, stop, route = machine.body.tick, machine.stop_record, machine.route
    x, y, yaw = tick.pose if tick else (0.0, 0.0, 0.0)
    vx, vy, yaw_rate = tick.velocity if tick else (0.0, 0.0, 0.0)
    told: dict[str, object] = {
        "robot": machine.robot.name,
        "state": str(machine.state),
        "goal": str(machine.goal),
        "since_s": round(machine.since_s, 3),
        "now_s": round(now_s, 3),
        "gait": tick.gait if tick else machine.robot.gaits[0].name,
        "pose": {"x_m": x, "y_m": y, "yaw_rad": yaw},
        "velocity": {"vx_m_s": vx, "vy_m_s": vy, "yaw_rate_rad_s": yaw_rate},
        "command": _command(machine, now_s),
        "slowdown": tick.slowdown if tick else 1.0,
        "stance": list(tick.stance) if tick else [],
        "feet_m": [list(foot) for foot in tick.feet_m] if tick else [],
        "height_m": tick.height_m if tick else None,
        "tilt_rad": list(tick.tilt_rad) if tick else None,
        "faults": machine.faults.describe(),
        "first_cause": stop.reason if stop else machine.faults.first_cause,
        "stop": {
            "latched": stop is not None,
            "category": stop.category if stop else None,
            "reason": stop.reason if stop else "",
        },
        "supply_v": machine.body.supply_v,
        "counters": dict(machine.counters),
        "route": route.progress() if route else None,
        "uptime_s": round(now_s - machine.started_s, 3),
        "digest": machine.robot.digest,
    }
    for name, read in machine.instruments.items():
        told[name] = read()
    return told


def _command(machine: Machine, now_s: float) -> dict[str, object]:
    command = machine.command
    return {
        "vx_m_s": command.vx if command else 0.0,
        "vy_m_s": command.vy if command else 0.0,
        "yaw_rate_rad_s": command.yaw_rate if command else 0.0,
        "age_s": round(now_s - command.received_s, 3) if command else None,
        "ttl_s": command.ttl_s if command else None,
        "holder": machine.commander.holder(now_s),
    }


def describe(machine: Machine) -> dict[str, object]:
    """The robot as configured, and what it may be asked."""
    robot = machine.robot
    envelope, posture, safety = robot.envelope, robot.posture_limits, robot.safety
    return {
        "robot": robot.name,
        "digest": robot.digest,
        "source": robot.source,
        "period_s": robot.period_s,
        "mass_kg": robot.mass_kg,
        "legs": [leg.name for leg in robot.legs],
        "joints": [joint.name for joint in robot.joints],
        "gaits": [gait.name for gait in robot.gaits],
        "envelope": {
            "forward_m_s": envelope.forward_m_s,
            "sideways_m_s": envelope.sideways_m_s,
            "turn_rad_s": envelope.turn_rad_s,
        },
        "stance": {"height_m": robot.stance.height_m, "rest_height_m": robot.stance.rest_height_m},
        "posture": {
            "height_m": list(posture.height_m),
            "roll_rad": posture.roll_rad,
            "pitch_rad": posture.pitch_rad,
            "yaw_rad": posture.yaw_rad,
            "lean_m": posture.lean_m,
        },
        "command_ttl_s": safety.command_ttl_s,
        "requests": methods.describe(),
    }
