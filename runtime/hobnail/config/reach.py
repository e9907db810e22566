"""Checks that the legs can put their feet where the configured heights ask for them; m and rad.

Standing, lying, at either end of each of the posture's limits and at the top of
each gait's lift, every joint must be within its limits with the feet in their
neutral places.  Nothing here looks at walking: that is for `hobnail check`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from hobnail.config.build import build_leg
from hobnail.config.fields import Section
from hobnail.config.strict_yaml import Listing, Node, Report
from hobnail.config.tables import JOINT_NAMES
from hobnail.motion.balance import neutral_feet
from hobnail.motion.foot import Foot
from hobnail.motion.gaits import BUILT_IN_GAITS, LIFT_SHARE
from hobnail.motion.leg import LegKinematics
from hobnail.motion.whole_body import WholeBody
from hobnail.robot import Gait, Leg, Robot, Vec2
from hobnail.servo import reachable_rad

# Key of a posture, its places in (height, roll, pitch, yaw, lean x, lean y), its unit and that in SI.
_POSTURES = (
    ("roll_deg", (1,), "deg", math.radians(1.0)),
    ("pitch_deg", (2,), "deg", math.radians(1.0)),
    ("yaw_deg", (3,), "deg", math.radians(1.0)),
    ("lean_mm", (4, 5), "mm", 0.001),
)
CLEAR_M = 0.001  # feet no nearer to the middle, and to each other, than this


class Reach:
    """The legs of a robot with their feet in given places (body frame, x and y)."""

    def __init__(self, legs: Sequence[Leg], feet: Sequence[Vec2]) -> None:
        self._legs = [
            (leg, LegKinematics(leg), [reachable_rad(joint) for joint in leg.joints], foot)
            for leg, foot in zip(legs, feet, strict=True)
        ]

    def obstacle(self, height_m: float, lift_m: float = 0.0) -> str:
        """What keeps the feet from that height of the body above them; empty when nothing does."""
        for leg, kinematics, spans, (x, y) in self._legs:
            at = (x - leg.hip_m[0], y - leg.hip_m[1], lift_m + leg.foot_radius_m - height_m - leg.hip_m[2])
            if not kinematics.nearest2 <= sum(each * each for each in at) <= kinematics.farthest2:
                return f"leg {leg.name} cannot reach"
            try:
                angles = kinematics.angles(*at)
            except ValueError:
                return f"leg {leg.name} cannot reach"
            for joint, angle, (low, high) in zip(leg.joints, angles, spans, strict=True):
                if low > high:
                    return f"{joint.name} has no angle that its pulse limits and its angle limits both allow"
                if not low <= angle <= high:
                    limits = f"{math.degrees(low):.0f} to {math.degrees(high):.0f} deg"
                    return f"{joint.name} would be at {math.degrees(angle):.0f} deg, its limits {limits}"
        return ""

    def heights(self) -> str:
        """The heights that nothing keeps the feet from, to the millimetre, in words."""
        longest = max(
            leg.upper_m + leg.lower_m + leg.foot_radius_m + abs(leg.hip_m[2]) for leg, *_ in self._legs
        )
        good = [mm for mm in range(math.ceil(longest * 1000.0) + 1) if not self.obstacle(mm / 1000.0)]
        if not good:
            return "a height at which no joint leaves its limits; there is none"
        return f"heights at which no joint leaves its limits, within {good[0]} to {good[-1]} mm"


def check_reach(section: Section, report: Report) -> None:
    """Tell which heights are out of reach, feet straight under their legs; for what could be read."""
    legs = _built_legs(section)
    stance = section.values.get("stance")
    if not legs or stance is None:
        return
    forward, spread = (stance.values.get(key, 0.0) for key in ("forward_mm", "spread_mm"))
    feet = [
        (leg.hip_m[0] + forward, leg.hip_m[1] + leg.abduction_m + math.copysign(1.0, leg.hip_m[1]) * spread)
        for leg in legs
    ]
    if _check_apart(legs, feet, stance, report):
        _check_heights(section, Reach(legs, feet), "", report)


def check_balanced_reach(section: Section, robot: Robot, report: Report) -> None:
    """The same for a whole robot, feet moved so that its centre of mass lies over them; and
    that it can take each of the postures that it may be told, one by one."""
    feet = neutral_feet(robot)
    _check_postures(section, robot, feet, report)
    shift_x = (feet[0][0] - robot.legs[0].hip_m[0] - robot.stance.forward_m) * 1000.0
    hint = f"To bring the centre of mass over them, the feet stand {abs(shift_x):.0f} mm "
    hint += "further ahead." if shift_x > 0.0 else "further back."
    _check_heights(section, Reach(robot.legs, feet), hint, report)


def _built_legs(section: Section) -> list[Leg]:
    """The legs of which nothing is missing or bad."""
    servos = {
        each.values["name"]: each for each in section.values.get("servos") or () if "name" in each.values
    }
    legs = section.values.get("legs") or ()
    return [build_leg(leg, servos) for leg in legs if _complete(leg, servos)]


def _complete(leg: Section, servos: dict[str, Section]) -> bool:
    if not _has_required(leg) or abs(leg.values["hip_mm"][1]) < CLEAR_M:
        return False
    for joint in (leg.values["joints"].values.get(name) for name in JOINT_NAMES):
        if joint is None or not _has_required(joint):
            return False
        servo = servos.get(joint.values["servo"])
        if servo is None or not _has_required(servo, {**servo.values, **joint.values}):
            return False
    return True


def _has_required(section: Section, values: dict[str, object] | None = None) -> bool:
    values = section.values if values is None else values
    return all(each.key in values for each in section.fields if each.required)


def _check_apart(legs: Sequence[Leg], feet: Sequence[Vec2], stance: Section, report: Report) -> bool:
    """Feet stay on their own side, and off each other."""
    for index, (leg, foot) in enumerate(zip(legs, feet, strict=True)):
        if foot[1] * leg.hip_m[1] < 0.0 or abs(foot[1]) < CLEAR_M:
            found = f"the foot of leg {leg.name} at y = {foot[1] * 1000.0:.0f} mm"
            report.add(stance.at("spread_mm"), found, "feet on their own side of the body")
            return False
        for other, place in zip(legs[:index], feet, strict=False):
            nearest = max(leg.foot_radius_m + other.foot_radius_m, CLEAR_M)
            if math.dist(foot, place) < nearest:
                gap = f"{math.dist(foot, place) * 1000.0:.0f} mm"
                found = f"the feet of legs {other.name} and {leg.name} {gap} apart"
                report.add(
                    stance.at("spread_mm"), found, f"at least {nearest * 1000.0:g} mm", "See their hip_mm."
                )
                return False
    return True


def _check_postures(section: Section, robot: Robot, places: Sequence[Vec2], report: Report) -> None:
    """Each tilt and lean that is written, by itself, either way, standing at stance height."""
    height_m = robot.stance.height_m
    feet = []
    for leg, place in zip(robot.legs, places, strict=True):
        spans = tuple(reachable_rad(joint) for joint in leg.joints)
        feet.append(Foot(leg, place, height_m, spans, 1.0 / len(robot.legs)))
    if not _takes(feet, height_m, (1,), 0.0):
        return  # told at the height itself
    posture = section.values["posture"]
    for key, indices, unit, size in _POSTURES:
        most = posture.values.get(key, 0.0)
        if _takes(feet, height_m, indices, most):
            continue
        shares = (percent / 100.0 for percent in range(1, 101))
        beyond = next(share for share in shares if not _takes(feet, height_m, indices, share * most))
        good = most * (beyond - 0.01)
        allowed = f"at most {math.floor(10.0 * good / size) / 10.0:g} {unit}"
        hint = "Beyond, standing at stance.height_mm, a leg is out of reach or a joint at its limit."
        report.add(posture.at(key), f"{most / size:g} {unit}", allowed, hint)


def _takes(feet: Sequence[Foot], height_m: float, indices: Sequence[int], value: float) -> bool:
    """Whether all legs reach with each of these parts of the posture at that value, either way."""
    body = WholeBody(feet)
    for index in indices:
        for signed in (value, -value):
            posture = [height_m, 0.0, 0.0, 0.0, 0.0, 0.0]
            posture[index] = signed
            body.solve((0.0, 0.0, 0.0), (0.0, 0.0), posture)
            if body.out_of_reach:
                return False
    return True


def _check_heights(section: Section, reach: Reach, hint: str, report: Report) -> None:
    stance, posture = section.values.get("stance"), section.values.get("posture")
    wanted: list[tuple[Node, float]] = []
    if stance:
        keys = [key for key in ("height_mm", "rest_height_mm") if key in stance.values]
        wanted += [(stance.at(key), stance.values[key]) for key in keys]
    if posture and "height_mm" in posture.values:
        listing = posture.at("height_mm")
        assert isinstance(listing, Listing)
        wanted += zip(listing.items, posture.values["height_mm"], strict=True)
    for node, height in wanted:
        if obstacle := reach.obstacle(height):
            report.add(node, f"{height * 1000.0:g} mm, where {obstacle}", reach.heights(), hint)
    standing = stance.values.get("height_mm") if stance else None
    if standing is None or reach.obstacle(standing):
        return
    for gait in section.values.get("gaits") or ():
        unsaid = Gait.__dataclass_fields__["lift_m"].default
        if gait.values.get("name") in BUILT_IN_GAITS and "phases" not in gait.values:
            unsaid = LIFT_SHARE * standing
        lift = gait.values.get("lift_mm", unsaid)
        if heights := [frame.values.get("lift", 0.0) for frame in gait.values.get("swing") or ()]:
            lift *= max(heights)
        if obstacle := reach.obstacle(standing, lift):
            found = f"a lift of {lift * 1000.0:g} mm, where {obstacle}"
            report.add(gait.at("lift_mm"), found, "less lift, or more stance.height_mm", hint)
