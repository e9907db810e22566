"""Feed-forward for what bends, rolls and trails: joint angles (rad) that put a loaded,
round foot on a slow servo where a rigid, pointed one would be.

Sag: a hobby servo holds with a stiffness k; a torque turns its shaft by
torque/k.  Commanding the opposite in advance removes it (virtual work: the
ground's force f on the foot makes the torque f . dp/dq on each joint).
Trailing: a motor that turns at w gives less torque by w times stall torque over
no-load speed, the slope of its torque-speed line; its position loop trails by
that over k, a fixed time, by which the command goes ahead.
Rolling: a foot of radius r rolls as its shank turns, and its centre moves by r
times the angle; the leg is sent there.

The load is what the schedule says each foot should carry, not a measurement.
"""

from __future__ import annotations

import math

from hobnail.motion.leg import LegKinematics
from hobnail.robot import Leg, Vec3


class LegCorrection:
    """Corrections of one leg about its neutral angles."""

    __slots__ = ("_give", "_lower_m", "_neutral", "_radius_m", "_upper_m", "active", "trail_s")

    def __init__(self, leg: Leg, kinematics: LegKinematics, neutral_rad: Vec3) -> None:
        self._upper_m = kinematics.upper_m
        self._lower_m = kinematics.lower_m
        self._radius_m = leg.foot_radius_m
        self._neutral = (neutral_rad[0], neutral_rad[1] + neutral_rad[2])
        stiffness = [joint.servo.stiffness_nm_rad for joint in leg.joints]
        self._give = tuple(1.0 / k if k else 0.0 for k in stiffness)
        a, b, c = (
            joint.servo.torque_nm / joint.servo.speed_rad_s * give
            for joint, give in zip(leg.joints, self._give, strict=True)
        )
        self.trail_s = (a, b, c)  # by which each servo trails a steady motion
        self.active = self._radius_m > 0.0 or any(self._give)

    def apply(self, roll: float, hip: float, knee: float, y: float, z: float, force_n: Vec3) -> Vec3:
        """Angles to command for the geometric angles (rad), the foot's y and z relative to
        the hip (m) and the force of the ground on it (body frame, N)."""
        shank = hip + knee
        shank_x = -self._lower_m * math.sin(shank)
        foot_x = shank_x - self._upper_m * math.sin(hip)
        give = self._give
        # Sag: minus f/k dp/dq.
        ahead, left, up = force_n
        push = up * math.cos(roll) - left * math.sin(roll)
        shank_z = -self._lower_m * math.cos(shank)
        foot_z = shank_z - self._upper_m * math.cos(hip)
        roll_by = (left * z - up * y) * give[0]
        hip_by = (push * foot_x - ahead * foot_z) * give[1]
        knee_by = (push * shank_x - ahead * shank_z) * give[2]
        radius = self._radius_m
        if radius:
            # Rolling about the y axis moves the centre along x, about the x axis along -y.
            forward = radius * (shank - self._neutral[1])
            folded = self._upper_m * self._lower_m * math.sin(knee)
            if abs(folded) > 1e-6:
                # Knee and hip that move the foot along x alone, in the plane of the leg.
                hip_by += forward * shank_x / folded
                knee_by -= forward * foot_x / folded
            roll_by += radius * (roll - self._neutral[0]) / z
        return roll + roll_by, hip + hip_by, knee + knee_by
