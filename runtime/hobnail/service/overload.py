"""Which servos hold too much for too long, by estimate: torques in N m, times in s.  Nothing measures it.

The load is the weight shared evenly among the standing feet, at rest: no
inertia, no friction, no uneven ground.  A servo that stands against a wall is
not noticed.  Pure: no clock.
"""

from __future__ import annotations

import math

from hobnail.controller import Tick
from hobnail.robot import Robot

GRAVITY_M_S2 = 9.81
CONTINUOUS_SHARE = 0.4  # of the stall torque: what a hobby servo may hold on and on (common practice)
SMOOTH_S = 5.0  # heat follows the mean square over some steps
EVERY_S = 0.1  # how often a new estimate is made


class LoadWatch:
    """Mean square torque of each joint, and for how long it has been above the continuous one."""

    def __init__(self, robot: Robot) -> None:
        self._robot = robot
        self._weight_n = robot.mass_kg * GRAVITY_M_S2
        self._square = [0.0] * len(robot.joints)
        self._over_s = [0.0] * len(robot.joints)
        self._waited_s = 0.0

    def update(self, tick: Tick | None, dt_s: float, supply_v: float) -> list[str]:
        """Go on by `dt_s`; None for `tick`: no pulses, all cool.  The joints that are over
        their limit, by name, each time a new estimate is made."""
        self._waited_s += dt_s
        if self._waited_s < EVERY_S:
            return []
        step_s, self._waited_s = self._waited_s, 0.0
        torques = self.torques_nm(tick) if tick is not None else [0.0] * len(self._square)
        keep = math.exp(-step_s / SMOOTH_S)
        limit_s, over = self._robot.safety.load_limit_s, []
        for index, (joint, torque) in enumerate(zip(self._robot.joints, torques, strict=True)):
            self._square[index] = keep * self._square[index] + (1.0 - keep) * torque * torque
            servo = joint.servo
            continuous = CONTINUOUS_SHARE * servo.torque_nm * supply_v / servo.rated_v
            change_s = step_s if self._square[index] > continuous * continuous else -step_s
            self._over_s[index] = min(max(0.0, self._over_s[index] + change_s), 2.0 * limit_s)
            if self._over_s[index] > limit_s:
                over.append(joint.name)
        return over

    def torques_nm(self, tick: Tick) -> list[float]:
        """What each joint holds, flat, in the order of `Robot.joints`: the ground's force
        times its lever about the joint's axis (virtual work)."""
        force_n = self._weight_n / max(1, sum(tick.stance))
        torques = []
        for leg, joints, foot, stands in zip(
            self._robot.legs, tick.joints_rad, tick.feet_m, tick.stance, strict=True
        ):
            roll, hip, knee = joints
            up = force_n if stands else 0.0
            in_plane = up * math.cos(roll)
            torques += [
                up * abs(foot[1] - leg.hip_m[1]),
                in_plane * abs(foot[0] - leg.hip_m[0]),
                in_plane * leg.lower_m * abs(math.sin(hip + knee)),
            ]
        return torques
