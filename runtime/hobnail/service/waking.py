"""Waking the joints: a group at a time at one posture, then all together to another; rad, s.

Pure.  The first pulse of a joint cannot be ramped: a hobby servo says nothing of
where it stands and turns there at full speed.  What can be done is to wake few
at a time, where they were last, and only then to move, limited.
"""

from __future__ import annotations

from collections.abc import Sequence

from hobnail.motion.glide import minimum_jerk
from hobnail.robot import Robot

PACE = 0.25  # share of the servos' usable speed: unhurried, since nobody knows what lies in the way
PEAK = 1.875  # peak over mean speed of the minimum-jerk profile (Flash & Hogan 1985)


class Waking:
    """From no pulses to every joint at `goal_rad`, by way of `start_rad`.

    `joints_rad` is the posture to be sent now, None for a joint that sleeps.
    """

    def __init__(self, robot: Robot, start_rad: Sequence[float], goal_rad: Sequence[float]) -> None:
        self._start = tuple(start_rad)
        self._goal = tuple(goal_rad)
        self._group = robot.safety.wake_group
        self._interval_s = robot.safety.wake_interval_s
        self._awake = 0
        self._since_group_s = self._interval_s  # the first group does not wait
        self._moved_s = 0.0
        self._duration_s = move_seconds(robot, self._start, self._goal)
        self.joints_rad: tuple[float | None, ...] = (None,) * len(self._goal)

    @property
    def all_awake(self) -> bool:
        """Every joint has its pulse."""
        return self._awake >= len(self._goal)

    @property
    def done(self) -> bool:
        """Every joint is at the goal."""
        return self.all_awake and self._moved_s >= self._duration_s

    def advance(self, dt_s: float) -> None:
        """Go on by `dt_s`: wake the next group when its time has come, or move on."""
        self._since_group_s += dt_s
        due = self._since_group_s + 1e-9 >= self._interval_s  # sums of steps are not exact
        if not self.all_awake:
            if due:
                self._awake = min(self._awake + self._group, len(self._goal))
                self._since_group_s = 0.0
                asleep = (None,) * (len(self._goal) - self._awake)
                self.joints_rad = self._start[: self._awake] + asleep
        elif due:
            self._moved_s = min(self._moved_s + dt_s, self._duration_s)
            share = minimum_jerk(self._moved_s / self._duration_s) if self._duration_s else 1.0
            self.joints_rad = tuple(
                start + share * (goal - start) for start, goal in zip(self._start, self._goal, strict=True)
            )


def move_seconds(robot: Robot, start_rad: Sequence[float], goal_rad: Sequence[float]) -> float:
    """How long all joints take together, none faster than `PACE` of its usable speed, s."""
    slowest_s = 0.0
    for joint, start, goal in zip(robot.joints, start_rad, goal_rad, strict=True):
        servo = joint.servo
        speed = servo.speed_rad_s * servo.usable_speed * robot.supply.nominal_v / servo.rated_v
        slowest_s = max(slowest_s, abs(goal - start) / speed)
    return PEAK * slowest_s / PACE
