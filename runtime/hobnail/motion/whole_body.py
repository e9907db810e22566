"""All leg angles for a body over its feet: posture, reach and joint limits; m, rad.

Feet are in the ground frame, the answer in the body frame and in joint angles.
No time and no gait here.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import cos, sin

from hobnail.motion.foot import Foot
from hobnail.motion.planar import Pose
from hobnail.robot import Span, Vec2, Vec3


class WholeBody:
    """The latest solution: `pose` of the body on the ground (x, y, yaw), its `height_m` and
    `tilt_rad` (roll, pitch), `feet_m` in the body frame, `joints_rad`, and the count of feet
    that were `out_of_reach`."""

    __slots__ = ("feet_m", "height_m", "joints_rad", "out_of_reach", "pose", "tilt_rad")

    def __init__(self) -> None:
        self.pose: Pose = (0.0, 0.0, 0.0)
        self.height_m = 0.0
        self.tilt_rad = (0.0, 0.0)
        self.feet_m: tuple[Vec3, ...] = ()
        self.joints_rad: tuple[Vec3, ...] = ()
        self.out_of_reach = 0

    def solve(
        self,
        feet: Sequence[Foot],
        pose: Pose,
        shift_m: Vec2,
        posture: Sequence[float],
    ) -> None:
        """Solve for the walk's `pose`, the body's `shift_m` over its supports and the
        `posture` (height, roll, pitch, yaw, lean x, lean y)."""
        height, roll, pitch, yaw, lean_x, lean_y = posture
        x0, y0, heading = pose
        c, s = cos(heading), sin(heading)
        shift_x, shift_y = shift_m[0] + lean_x, shift_m[1] + lean_y
        x0 += c * shift_x - s * shift_y
        y0 += s * shift_x + c * shift_y
        if yaw != 0.0:
            heading += yaw
            c, s = cos(heading), sin(heading)
        self.pose = (x0, y0, heading)
        self.height_m = height
        self.tilt_rad = (roll, pitch)
        tilted = roll != 0.0 or pitch != 0.0
        if tilted:
            cr, sr, cp, sp = cos(roll), sin(roll), cos(pitch), sin(pitch)
        feet_m, joints = [], []
        self.out_of_reach = 0
        for foot in feet:
            dx, dy = foot.x - x0, foot.y - y0
            x, y, z = c * dx + s * dy, c * dy - s * dx, foot.radius_m + foot.lift_m - height
            if tilted:
                # The transpose of Ry(pitch) Rx(roll).
                x, z = cp * x - sp * z, sp * x + cp * z
                y, z = cr * y + sr * z, cr * z - sr * y
            hip_x, hip_y, hip_z = foot.hip
            at_y, at_z = y - hip_y, z - hip_z
            try:
                angles = foot.kinematics.angles(x - hip_x, at_y, at_z)
            except ValueError:
                angles = foot.kinematics.angles(*foot.kinematics.nearest_reachable(x - hip_x, at_y, at_z))
                self.out_of_reach += 1
            held = hold(angles, foot.limits)
            if held != angles:
                angles = held
                self.out_of_reach += 1
            feet_m.append((x, y, z))
            joints.append(angles)
        self.feet_m = tuple(feet_m)
        self.joints_rad = tuple(joints)


def hold(angles: Vec3, limits: tuple[Span, ...]) -> Vec3:
    """Angles held to their limits; the very same tuple when all are within."""
    a, b, c = angles
    (a0, a1), (b0, b1), (c0, c1) = limits
    if a0 <= a <= a1 and b0 <= b <= b1 and c0 <= c <= c1:
        return angles
    return min(max(a, a0), a1), min(max(b, b0), b1), min(max(c, c0), c1)
