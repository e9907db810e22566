"""Rehearsal: the exact configuration walks in a physics engine, at the desk and in CI.

    from hobnail import load_robot
    from hobnail.workshop.rehearse import rehearse

    def test_our_robot_walks_straight_with_a_shifted_battery():
        result = rehearse(load_robot("config/juniper.yaml"), "straight", battery_shift_m=(0.01, 0, 0))
        assert not result.fell and result.speed_error < 0.10 and result.tilt_95_rad < 0.06

The service's state machine, controller and servo mapping are the very ones that run
the robot; `backend` is a servo driver whose servos turn in physics.  Needs the extra
`physics`; reports and films need the extra `reports`.
"""

from __future__ import annotations

from typing import Any

from hobnail.robot import Robot
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.limits import Limits
from hobnail.workshop.rehearse.measures import Result, Stretch, measure
from hobnail.workshop.rehearse.runner import Recording, run
from hobnail.workshop.rehearse.scenarios import SCENARIOS, Scenario, scenario, walking

__all__ = [
    "SCENARIOS",
    "Disturbances",
    "Limits",
    "Recording",
    "Result",
    "Scenario",
    "Stretch",
    "measure",
    "rehearse",
    "run",
    "scenario",
    "walking",
]


def rehearse(robot: Robot, what: str | Scenario = "straight", **errors: Any) -> Result:
    """Rehearse one scenario and measure it.

    `what` is the name of a built-in scenario (`SCENARIOS`), or one of your own, such as
    `walking(robot, 0.2, yaw_rate=0.3)`.  `errors` are the fields of `Disturbances`, in SI
    units: `zero_error_rad`, `length_error_m`, `battery_shift_m`, `slope_rad`, `friction`,
    `roughness_m`, `weak_servo`, `lost_frames`, `push_ns`, `supply_v`, `seed` and so on.
    The same arguments give the same result, bit for bit.  `result.failures()` tells
    what a strict judge would object to; `result.fell`, `.speed_error`, `.turn_error`,
    `.drift_rad_m`, `.tilt_95_rad`, `.scuffs` and the rest are for tests of your own.

    Raises CommandError (unknown scenario, an error out of its range, a value that the robot
    may not be asked for), DriverUnavailableError (the physics engine is not installed).
    """
    disturbances = Disturbances(**errors)
    if isinstance(what, str):
        what = scenario(what, robot, seed=disturbances.seed)
    return measure(run(robot, what, disturbances))
