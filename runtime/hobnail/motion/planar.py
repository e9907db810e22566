"""Rigid motion in the ground plane, SE(2): m and rad, x forward, y left; no state.

A twist (vx, vy, yaw_rate) held for a time moves a body along an arc about its
instantaneous centre; the straight line is the limit, and one formula serves
both.  Source of the exponential: Lynch & Park, Modern Robotics, section 3.2.3
(the planar case), written with the half angle so that it keeps its digits near
zero yaw rate.
"""

from __future__ import annotations

from math import cos, hypot, sin

Twist = tuple[float, float, float]
Pose = tuple[float, float, float]


def exp_twist(vx: float, vy: float, yaw_rate: float, time_s: float) -> Pose:
    """Displacement (dx, dy, dyaw) after holding a body twist for `time_s`, in the frame
    in which the body started."""
    half = 0.5 * yaw_rate * time_s
    if half == 0.0:
        return vx * time_s, vy * time_s, 0.0
    s = sin(half)
    chord = time_s * (s / half)
    c = cos(half)
    return chord * (c * vx - s * vy), chord * (s * vx + c * vy), 2.0 * half


def compose(a: Pose, b: Pose) -> Pose:
    """The pose `b`, given in the frame of `a`, in the frame in which `a` is given."""
    c, s = cos(a[2]), sin(a[2])
    return a[0] + c * b[0] - s * b[1], a[1] + s * b[0] + c * b[1], a[2] + b[2]


def to_origin(vx: float, vy: float, yaw_rate: float, pivot_m: tuple[float, float]) -> Twist:
    """The twist at the body origin of a body whose point `pivot_m` moves with (vx, vy)."""
    return vx + yaw_rate * pivot_m[1], vy - yaw_rate * pivot_m[0], yaw_rate


def point_speed(twist: Twist, x_m: float, y_m: float) -> float:
    """Speed over the ground (m/s) of the body's point (x, y) under a twist at the origin."""
    return hypot(twist[0] - twist[2] * y_m, twist[1] + twist[2] * x_m)
