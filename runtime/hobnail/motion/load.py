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

from itertools import chain
from math import copysign, cos, sin
from typing import NamedTuple

from hobnail.motion.balance import GRAVITY_M_S2
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Joint, Leg, Vec3

# What the ground does through all feet together: force ahead, left and up (N), and the moment
# about the vertical through the body origin (N m).
Drive = tuple[float, float, float, float]
# The same for a foot that carries everything: the force on it at the body origin, and how that
# grows with its distance from there, across it (N/m).
FootDrive = tuple[float, float, float, float]

# Share of the stall torque from which on the side is sure to which a torque pushes a servo:
# about the friction of its gears (common practice).
SURE_SHARE = 0.03
# Sine of the knee angle down to which rolling is made up for in full.
LEAST_FOLD = 0.2


class LegCorrection:
    """Corrections of one leg about its neutral angles.

    `trail_s` is by what time each servo trails a steady motion.
    """

    __slots__ = ("_bends", "_fold_m2", "_hip_y", "_hip_z", "_neutral", "_radius_m", "_weighs", "trail_s")

    def __init__(self, leg: Leg, kinematics: LegKinematics, neutral_rad: Vec3) -> None:
        _, self._hip_y, self._hip_z = leg.hip_m
        self._radius_m = leg.foot_radius_m
        self._neutral = (neutral_rad[0], neutral_rad[1] + neutral_rad[2])
        self._fold_m2 = kinematics.upper_m * kinematics.lower_m
        # Link masses sit midway: the weights that act at the knee, and half of it at the foot,
        # and the moment of all about the roll axis.
        self._weighs = (
            kinematics.upper_m,
            kinematics.lower_m,
            GRAVITY_M_S2 * (0.5 * leg.upper_kg + leg.lower_kg),
            GRAVITY_M_S2 * 0.5 * leg.lower_kg,
            GRAVITY_M_S2 * (leg.hip_kg + leg.upper_kg + leg.lower_kg) * leg.abduction_m,
        )
        bends = [_Bend.of(joint) for joint in leg.joints]
        # All of the first kind, then all of the second, and so on.
        self._bends = tuple(chain.from_iterable(zip(*bends, strict=True)))
        a, b, c = (bend.trail_s for bend in bends)
        self.trail_s = (a, b, c)

    def command(self, angles: Vec3, speeds: Vec3, foot_m: Vec3, load: float, drive: FootDrive) -> Vec3:
        """What the servos must be sent for geometric angles (rad) that move at `speeds` (rad/s),
        with the foot at `foot_m` (body frame) and its share `load` of what the ground does: all
        that the head of this file names."""
        roll, hip, knee = angles
        x, y, z = foot_m
        ahead, left, up, spin = drive
        # The ground's force on this foot.
        ahead, left, up = load * (ahead - spin * y), load * (left + spin * x), load * up
        y -= self._hip_y
        z -= self._hip_z
        upper_m, lower_m, at_knee, at_foot, side_nm = self._weighs
        # Links in the plane of the leg: how far they go back and down.
        shank = hip + knee
        upper_back, upper_down = upper_m * sin(hip), upper_m * cos(hip)
        lower_back, lower_down = lower_m * sin(shank), lower_m * cos(shank)
        cos_roll, sin_roll = cos(roll), sin(roll)
        push = up * cos_roll - left * sin_roll
        # Torques that hold: minus f . dp/dq, for the ground's push and the weights of the links.
        # A round foot is pushed at its underside.
        radius = self._radius_m
        c = lower_back * (cos_roll * at_foot - push) + (lower_down + radius * cos_roll) * ahead
        b = c + upper_back * (cos_roll * at_knee - push) + upper_down * ahead
        a = left * (z - radius) - up * y + side_nm * cos_roll
        a += sin_roll * (at_knee * upper_down + at_foot * lower_down)
        # How far the shafts stand off while they bear that and move, and to which side of their
        # slack that takes them.
        va, vb, vc = speeds
        give_a, give_b, give_c, ta, tb, tc, slack_a, slack_b, slack_c, sure_a, sure_b, sure_c = self._bends
        a = give_a * a + ta * va
        b = give_b * b + tb * vb
        c = give_c * c + tc * vc
        a += slack_a * a / (abs(a) + sure_a)
        b += slack_b * b / (abs(b) + sure_b)
        c += slack_c * c / (abs(c) + sure_c)
        if radius:
            # Rolling about the y axis moves the centre along x, about the x axis along -y.
            neutral_roll, neutral_shank = self._neutral
            ahead = radius * cos_roll * (shank - neutral_shank)
            left = radius * (neutral_roll - roll)
            # The roll that moves the foot along y, and in the plane of the leg what moves it
            # along x and takes back the height that this roll costs.
            depth, back = upper_down + lower_down, upper_back + lower_back
            lower = y * left / depth
            # A leg nearly straight cannot, and is left to roll a little farther.
            bend = sin(knee)
            if abs(bend) < LEAST_FOLD:
                bend = copysign(LEAST_FOLD, bend)
            fold_m2 = self._fold_m2 * bend
            a += left * cos_roll / depth
            b += (lower_down * lower - lower_back * ahead) / fold_m2
            c += (back * ahead - depth * lower) / fold_m2
        return roll + a, hip + b, knee + c


class _Bend(NamedTuple):
    """How one servo stands off from what it is sent."""

    give: float  # rad for each N m; 0 when its stiffness is not known
    trail_s: float
    slack_rad: float  # to each side
    sure_rad: float  # standing off that much it is halfway across its slack

    @classmethod
    def of(cls, joint: Joint) -> _Bend:
        servo = joint.servo
        give = 1.0 / servo.stiffness_nm_rad if servo.stiffness_nm_rad else 0.0
        trail_s = servo.trail_s
        if trail_s is None:
            trail_s = give * servo.torque_nm / servo.speed_rad_s
        if not give:
            return cls(0.0, trail_s, 0.0, 1.0)
        slack_rad = half_dead_band_rad(joint) + servo.backlash_rad / 2
        return cls(give, trail_s, slack_rad, give * SURE_SHARE * servo.torque_nm)


def half_dead_band_rad(joint: Joint) -> float:
    """Half the servo's dead band (rad of the joint), by the slope of its pulse map as a whole."""
    (low_rad, low_us), (high_rad, high_us) = joint.pulse_map[0], joint.pulse_map[-1]
    return abs((high_rad - low_rad) / (high_us - low_us)) * joint.servo.dead_band_us / 2
