"""Words for a joint: which way its foot goes, how its angle is measured, postures that an eye can judge; rad.

By the axes of `robot.Leg`: a positive roll swings a foot to the left, a positive
pitch of hip or knee swings it to the rear.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

from hobnail.robot import Joint, Leg
from hobnail.servo import JointMap

ROLL, HIP, KNEE = range(3)
ROOM_RAD = math.radians(10.0)  # to jog in, either side of a posture
_SQUARE = math.pi / 2.0


class Posture(NamedTuple):
    """A joint angle and how it looks."""

    angle_rad: float
    words: str


class Place(NamedTuple):
    """A joint in its leg: `number` is 0 for roll, 1 for hip, 2 for knee."""

    leg: Leg
    number: int

    @property
    def joint(self) -> Joint:
        """The joint itself."""
        return self.leg.joints[self.number]


def ways(place: Place) -> tuple[str, str]:
    """What the foot does when the joint angle grows, and when it shrinks."""
    leg, number = place
    if number == ROLL:
        return ("outward", "inward") if leg.hip_m[1] > 0.0 else ("inward", "outward")
    if number == HIP:
        return ("backward", "forward")
    return ("bends", "straightens") if leg.knee > 0 else ("straightens", "bends")


def how_measured(place: Place) -> str:
    """What to put the protractor to, and which way counts as positive."""
    leg, number = place
    if number == ROLL:
        return f"degrees of the leg from plumb, seen from the front; + is {ways(place)[0]}"
    if number == HIP:
        return "degrees of the upper link from plumb, seen from the side; + is to the rear"
    sign = "+" if leg.knee > 0 else "-"
    return f"degrees by which the lower link is bent away from the line of the upper one, with a {sign} sign"


def looks(place: Place, angle_rad: float) -> str:
    """How the joint looks at that angle, the body being level."""
    degrees = math.degrees(angle_rad)
    plus, minus = ways(place)
    size = f"{abs(degrees):g} deg"
    if place.number == ROLL:
        if not degrees:
            return "the leg is plumb, seen from the front, neither outward nor inward"
        return f"the leg stands {size} {plus if degrees > 0 else minus} from plumb, seen from the front"
    if place.number == HIP:
        if not degrees:
            return "the upper link is plumb: the knee straight below the hip, seen from the side"
        side = "rear" if degrees > 0 else "front"
        if abs(degrees) == 90.0:
            return f"the upper link is level, the knee to the {side}"
        return f"the upper link stands {size} from plumb, the knee to the {side}"
    if not degrees:
        return "the leg is straight: the lower link in line with the upper one"
    if abs(degrees) == 90.0:
        return "the lower link is at a right angle to the upper one: a square fits"
    return f"the lower link is bent by {size} from the line of the upper one"


def reference(place: Place, joint: Joint) -> Posture:
    """The posture at which the trim is judged: straight or square, where the joint gets there with
    room to jog, the nearest to its horn's middle; else the middle of its range, by a protractor."""
    low, high = pulse_range_rad(joint)
    inside = joint.angle_limits_rad
    candidates = [
        angle
        for angle in (0.0, _SQUARE, -_SQUARE)
        if low + ROOM_RAD <= angle <= high - ROOM_RAD and inside[0] - 1e-9 <= angle <= inside[1] + 1e-9
    ]
    if candidates:
        angle = min(candidates, key=lambda candidate: abs(candidate - joint.zero_rad))
    else:
        angle = _round(0.5 * sum(JointMap(joint).reachable_rad))
    return Posture(angle, looks(place, angle))


def spread(place: Place, joint: Joint, count: int) -> list[Posture]:
    """`count` postures over the joint's range, at whole steps of five degrees where it is wide enough."""
    low, high = JointMap(joint).reachable_rad
    low, high = low + 0.05 * (high - low), high - 0.05 * (high - low)
    angles: Sequence[float] = [low + k * (high - low) / (count - 1) for k in range(count)]
    rounded = [_round(angle) for angle in angles]
    if len(set(rounded)) == count:
        angles = rounded
    return [Posture(angle, looks(place, angle)) for angle in angles]


def pulse_range_rad(joint: Joint) -> tuple[float, float]:
    """The angles between which the pulse limits leave the joint."""
    joint_map = JointMap(joint)
    low, high = sorted(joint_map.angle_rad(pulse) for pulse in joint.pulse_limits_us)
    return low, high


def _round(angle_rad: float) -> float:
    return math.radians(5.0 * round(math.degrees(angle_rad) / 5.0))
