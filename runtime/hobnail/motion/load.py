"""Feed-forward for what bends, rolls and trails: joint angles (rad) that put a loaded,
round foot on a slow servo where a rigid, pointed one would be.

Sag: a hobby servo holds with a stiffness k; a torque turns its shaft by
torque/k.  Commanding the opposite in advance removes it (virtual work: the
ground's force f on the foot makes the torque f . dp/dq on each joint, and so do
the weights of the leg's links, which a foot in the air has as well).
Trailing: a motor that turns at w gives less torque by w times stall torque over
no-load speed, the slope of its torque-speed line; its position loop trails by
that over k, a fixed time, by which the command goes ahead.
Slack: a servo that bears a torque stands off by half its dead band and half its
backlash more, towards the side on which it is pushed.
Rolling: a foot of radius r rolls as its shank turns, and its centre moves by r
times the angle; the leg is sent there.

The load is what the schedule says each foot should carry, not a measurement.
"""

from __future__ import annotations

from cmath import rect
from math import copysign, cos, sin

from hobnail.motion.balance import GRAVITY_M_S2
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Joint, Leg, Vec3

# Share of the stall torque from which on the side is sure to which a torque pushes a servo:
# about the friction of its gears (common practice).
SURE_SHARE = 0.03
# Sine of the knee angle down to which rolling is made up for in full.
LEAST_FOLD = 0.2


class LegCorrection:
    """Corrections of one leg about its neutral angles."""

    __slots__ = (
        "_fold_m2",
        "_give",
        "_lower_m",
        "_neutral",
        "_radius_m",
        "_side_nm",
        "_upper_m",
        "_weights_n",
        "active",
        "slack_rad",
        "slope_nm_s",
        "sure_nm",
        "trail_s",
    )

    def __init__(self, leg: Leg, kinematics: LegKinematics, neutral_rad: Vec3) -> None:
        self._upper_m = kinematics.upper_m
        self._lower_m = kinematics.lower_m
        self._fold_m2 = self._upper_m * self._lower_m
        self._radius_m = leg.foot_radius_m
        self._neutral = (neutral_rad[0], neutral_rad[1] + neutral_rad[2])
        stiffness = [joint.servo.stiffness_nm_rad for joint in leg.joints]
        a, b, c = (1.0 / k if k else 0.0 for k in stiffness)
        self._give = (a, b, c)
        a, b, c = (joint.servo.torque_nm / joint.servo.speed_rad_s for joint in leg.joints)
        self.slope_nm_s = (a, b, c)  # of the torque-speed line, N m s/rad
        a, b, c = (
            slope * give if joint.servo.trail_s is None else joint.servo.trail_s
            for joint, slope, give in zip(leg.joints, self.slope_nm_s, self._give, strict=True)
        )
        self.trail_s = (a, b, c)  # by which each servo trails a steady motion
        a, b, c = (
            half_dead_band_rad(joint) + joint.servo.backlash_rad / 2 if k else 0.0
            for joint, k in zip(leg.joints, stiffness, strict=True)
        )
        self.slack_rad = (a, b, c)
        a, b, c = (SURE_SHARE * joint.servo.torque_nm for joint in leg.joints)
        self.sure_nm = (a, b, c)
        # Link masses sit midway: the weights that act at the knee, and half of it at the foot.
        self._weights_n = (
            GRAVITY_M_S2 * (0.5 * leg.upper_kg + leg.lower_kg),
            GRAVITY_M_S2 * 0.5 * leg.lower_kg,
        )
        self._side_nm = GRAVITY_M_S2 * (leg.hip_kg + leg.upper_kg + leg.lower_kg) * leg.abduction_m
        self.active = self._radius_m > 0.0 or any(self._give) or any(self.trail_s)

    def command(self, angles: Vec3, speeds: Vec3, y: float, z: float, force_n: Vec3) -> Vec3:
        """What the servos must be sent for geometric angles (rad) that move at `speeds` (rad/s),
        with the foot at `y` and `z` relative to the hip (m) and the force of the ground on it
        (body frame, N): all that the head of this file names."""
        roll, hip, knee = angles
        ahead, left, up = force_n
        # In the plane of the leg: down, and back as the imaginary part.
        upper, lower = rect(self._upper_m, hip), rect(self._lower_m, hip + knee)
        cos_roll, sin_roll = cos(roll), sin(roll)
        push = up * cos_roll - left * sin_roll
        # Torques that hold: minus f . dp/dq, for the ground's push and the weights of the links.
        at_knee, at_foot = self._weights_n
        c = (lower * complex(cos_roll * at_foot - push, ahead)).imag
        b = c + (upper * complex(cos_roll * at_knee - push, ahead)).imag
        a = left * z - up * y + self._side_nm * cos_roll
        a += sin_roll * (at_knee * upper.real + at_foot * lower.real)
        va, vb, vc = speeds
        ga, gb, gc = self._give
        ta, tb, tc = self.trail_s
        roll_by, hip_by, knee_by = ga * a + ta * va, gb * b + tb * vb, gc * c + tc * vc
        # What each servo bears while it moves says to which side of its slack it is pushed.
        sa, sb, sc = self.slope_nm_s
        a, b, c = a + sa * va, b + sb * vb, c + sc * vc
        ua, ub, uc = self.sure_nm
        da, db, dc = self.slack_rad
        roll_by += da * a / (abs(a) + ua)
        hip_by += db * b / (abs(b) + ub)
        knee_by += dc * c / (abs(c) + uc)
        radius = self._radius_m
        if radius:
            # Rolling about the y axis moves the centre along x, about the x axis along -y.
            neutral_roll, neutral_shank = self._neutral
            forward = radius * (hip + knee - neutral_shank)
            # Knee and hip that move the foot along x alone, in the plane of the leg.  A leg
            # nearly straight cannot, and is left to roll a little farther.
            bend = sin(knee)
            if abs(bend) < LEAST_FOLD:
                bend = copysign(LEAST_FOLD, bend)
            turn = forward / (self._fold_m2 * bend)
            hip_by -= turn * lower.imag
            knee_by += turn * (upper.imag + lower.imag)
            roll_by += radius * (roll - neutral_roll) / z
        return roll + roll_by, hip + hip_by, knee + knee_by


def half_dead_band_rad(joint: Joint) -> float:
    """Half the servo's dead band (rad of the joint), by the slope of its pulse map as a whole."""
    (low_rad, low_us), (high_rad, high_us) = joint.pulse_map[0], joint.pulse_map[-1]
    return abs((high_rad - low_rad) / (high_us - low_us)) * joint.servo.dead_band_us / 2
