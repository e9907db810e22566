"""All leg angles for a body over its feet: posture, reach and joint limits; m, rad.

Feet are in the ground frame, the answer in the body frame and in joint angles.
No time and no gait here.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import chain
from math import cos, sin

from hobnail.motion.foot import Foot
from hobnail.motion.joint_vector import held, legwise, within
from hobnail.motion.planar import Pose
from hobnail.robot import Vec2, Vec3


class WholeBody:
    """The latest solution: `pose` of the body on the ground (x, y, yaw), its `height_m` and
    `tilt_rad` (roll, pitch), `feet_m` in the body frame, the joints' `angles` in a row and
    the same as `joints_rad` by legs, and the count of feet that were `out_of_reach`.

    `lows` and `highs` are the joints' limits.
    """

    __slots__ = (
        "_feet",
        "angles",
        "feet_m",
        "height_m",
        "highs",
        "joints_rad",
        "lows",
        "out_of_reach",
        "pose",
        "tilt_rad",
    )

    def __init__(self, feet: Sequence[Foot]) -> None:
        self._feet = feet
        self.lows = [low for foot in feet for low, _ in foot.limits]
        self.highs = [high for foot in feet for _, high in foot.limits]
        self.pose: Pose = (0.0, 0.0, 0.0)
        self.height_m = 0.0
        self.tilt_rad = (0.0, 0.0)
        self.feet_m: tuple[Vec3, ...] = ()
        self.angles: list[float] = []
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
        beyond = set()
        for foot in self._feet:
            dx, dy = foot.x - x0, foot.y - y0
            x, y, z = c * dx + s * dy, c * dy - s * dx, foot.radius_m + foot.lift_m - height
            if tilted:
                # The transpose of Ry(pitch) Rx(roll).
                x, z = cp * x - sp * z, sp * x + cp * z
                y, z = cr * y + sr * z, cr * z - sr * y
            hip_x, hip_y, hip_z = foot.hip
            feet_m.append((x, y, z))
            kinematics = foot.kinematics
            try:
                joints.append(kinematics.angles(x - hip_x, y - hip_y, z - hip_z))
            except ValueError:
                beyond.add(len(joints))
                nearest = kinematics.nearest_reachable(x - hip_x, y - hip_y, z - hip_z)
                joints.append(kinematics.angles(*nearest))
        self.feet_m = tuple(feet_m)
        self.joints_rad = tuple(joints)
        self.angles = list(chain.from_iterable(joints))
        if not within(self.lows, self.angles, self.highs):
            self.take(held(self.lows, self.angles, self.highs))
            beyond |= {leg for leg, angles in enumerate(joints) if angles != self.joints_rad[leg]}
        self.out_of_reach = len(beyond)

    def take(self, angles: list[float]) -> None:
        """Those angles, not the ones solved for."""
        self.angles = angles
        self.joints_rad = legwise(angles)
