"""Joint angle (rad) <-> pulse width (us) through zero, trim, direction and pulse map.

shaft = direction * (angle - zero) + trim; pulse = map(shaft).  The map is
piecewise linear through its points and goes on straight past its ends.  Nothing
here clamps in silence: `reachable_rad` says what angles a joint's pulse limits
leave, and the controller keeps to them.
"""

from __future__ import annotations

from bisect import bisect_right
from itertools import pairwise

from hobnail.robot import Joint, Span

ROUNDING_RAD = 1e-9


class JointMap:
    """The way between one joint's angle and its servo's pulse, made ready for use.

    `pieces` are (offset_us, us_per_rad) in joint angle, one for each stretch
    between the `knots_rad`, ascending.
    """

    __slots__ = ("knots_rad", "pieces", "pulse_limits_us", "reachable_rad")

    def __init__(self, joint: Joint) -> None:
        points = sorted(
            ((shaft - joint.trim_rad) * joint.direction + joint.zero_rad, pulse)
            for shaft, pulse in joint.pulse_map
        )
        self.knots_rad = [angle for angle, _ in points[1:-1]]
        self.pieces: list[tuple[float, float]] = []
        for (angle0, pulse0), (angle1, pulse1) in pairwise(points):
            slope = (pulse1 - pulse0) / (angle1 - angle0)
            self.pieces.append((pulse0 - slope * angle0, slope))
        self.pulse_limits_us = joint.pulse_limits_us
        ends = sorted(self.angle_rad(pulse) for pulse in joint.pulse_limits_us)
        # A hair inside, so that rounding cannot carry a pulse past its limit.
        self.reachable_rad: Span = (
            max(ends[0] + ROUNDING_RAD, joint.angle_limits_rad[0]),
            min(ends[1] - ROUNDING_RAD, joint.angle_limits_rad[1]),
        )

    def pulse_us(self, angle_rad: float) -> float:
        """Pulse width for a joint angle; not clamped."""
        offset, slope = self.pieces[bisect_right(self.knots_rad, angle_rad)]
        return offset + slope * angle_rad

    def angle_rad(self, pulse_us: float) -> float:
        """Joint angle for a pulse width; the inverse of `pulse_us`."""
        rising = self.pieces[0][1] > 0.0
        for index, knot in enumerate(self.knots_rad):
            offset, slope = self.pieces[index]
            at_knot = offset + slope * knot
            if (pulse_us < at_knot) == rising:
                return (pulse_us - offset) / slope
        offset, slope = self.pieces[-1]
        return (pulse_us - offset) / slope


def pulse_us(joint: Joint, angle_rad: float) -> float:
    """Pulse width (us) that brings a joint to an angle (rad); not clamped."""
    return JointMap(joint).pulse_us(angle_rad)


def angle_rad(joint: Joint, pulse_us: float) -> float:
    """Joint angle (rad) that a pulse width (us) asks for."""
    return JointMap(joint).angle_rad(pulse_us)


def reachable_rad(joint: Joint) -> Span:
    """The joint angles that both the angle limits and the pulse limits allow."""
    return JointMap(joint).reachable_rad
