"""All leg angles for a body over its feet: posture, reach and joint limits; m, rad.

Feet are in the ground frame, the answer in the body frame and in joint angles.
No time and no gait here.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import cos, sin

from hobnail.motion.foot import Foot
from hobnail.motion.joint_steps import clamp_limits
from hobnail.motion.planar import Pose
from hobnail.robot import Vec2, Vec3


class WholeBody:
    """The latest solution: `pose` of the body on the ground (x, y, yaw), its `height_m` and
    `tilt_rad` (roll, pitch), `feet_m` in the body frame, `joints_rad`, and the count of feet
    that were `out_of_reach`."""

    __slots__ = ("_legs", "feet_m", "height_m", "joints_rad", "out_of_reach", "pose", "tilt_rad")

    def __init__(self, feet: Sequence[Foot]) -> None:
        self._legs = [(foot, foot.radius_m, foot.hip, foot.kinematics, foot.limits) for foot in feet]
        self.pose: Pose = (0.0, 0.0, 0.0)
        self.height_m = 0.0
        self.tilt_rad = (0.0, 0.0)
        self.feet_m: tuple[Vec3, ...] = ()
        self.joints_rad: tuple[Vec3, ...] = ()
        self.out_of_reach = 0

    def solve(self, pose: Pose, shift_m: Vec2, posture: Sequence[float]) -> None:
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
        for foot, radius, (hip_x, hip_y, hip_z), kinematics, limits in self._legs:
            dx, dy = foot.x - x0, foot.y - y0
            x, y, z = c * dx + s * dy, c * dy - s * dx, radius + foot.lift_m - height
            if tilted:
                # The transpose of Ry(pitch) Rx(roll).
                x, z = cp * x - sp * z, sp * x + cp * z
                y, z = cr * y + sr * z, cr * z - sr * y
            feet_m.append((x, y, z))
            at_x, at_y, at_z = x - hip_x, y - hip_y, z - hip_z
            reached = True
            try:
                angles = kinematics.angles(at_x, at_y, at_z)
            except ValueError:
                reached = False
                angles = kinematics.angles(*kinematics.nearest_reachable(at_x, at_y, at_z))
            q0, q1, q2 = angles
            (low0, high0), (low1, high1), (low2, high2) = limits
            if not (low0 <= q0 <= high0 and low1 <= q1 <= high1 and low2 <= q2 <= high2):
                reached = False
                angles = clamp_limits(angles, limits)
            if not reached:
                self.out_of_reach += 1
            joints.append(angles)
        self.feet_m = tuple(feet_m)
        self.joints_rad = tuple(joints)
