"""What a robot truly walks, from walks measured with a tape: the response of `robot.WalkResponse`; m, rad.

One measured walk gives one column of the linear map from what the feet make to
what truly happens: straight ahead, straight sideways, or a turn on the spot.  A
second walk improves on the first.  Nothing here walks or keeps anything.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import NamedTuple

from hobnail.config.fields import Kind, Number
from hobnail.config.tables import AHEAD, SIDEWAYS, TURN
from hobnail.errors import CommandError
from hobnail.motion.planar import Pose, Twist
from hobnail.response import feet_twist, log_pose
from hobnail.robot import WalkResponse

KINDS = ("ahead", "sideways", "turn")
LEAST_M = 0.5  # a tape is read to 5 mm: that is 1 per cent of it
LEAST_RAD = math.radians(90.0)
MOST_HEADING_RAD = math.radians(120.0)  # of a straight walk: more is no straight walk
ADVICE = (
    "That is no small error, and a trim would only hide it. Look for a floor that slips, for links that are "
    "longer or shorter than the configuration says, for horns that sit wrong (`hobnail calibrate`); then "
    "measure again"
)


class Walk(NamedTuple):
    """A measured walk of one kind.

    `odometry` is what the robot says that it walked, `true` what the tape and
    the protractor say, both from where it started: (m ahead, m to the left, rad
    turned to the left).  Of a turn on the spot only the angle counts, and may be
    more than a whole one.
    """

    kind: str
    odometry: Pose
    true: Pose


def improved(response: WalkResponse, walk: Walk) -> WalkResponse:
    """The response that explains the walk, which was made while `response` was in use.

    The change goes into the walk's own column alone, so that walks of one kind
    leave what the others gave as it is.  Raises CommandError for a walk that
    cannot be used and a result that no good robot has.
    """
    check_walk(walk)
    number = KINDS.index(walk.kind)
    said, true = _twist(walk.kind, walk.odometry), _twist(walk.kind, walk.true)
    feet = feet_twist(response, said)[number]
    column = [(after - before) / feet for after, before in zip(true, said, strict=True)]
    if walk.kind == "turn":
        found = replace(response, turn=response.turn + column[2])
    else:
        before = response.ahead if walk.kind == "ahead" else response.sideways
        x, y, yaw = (old + new for old, new in zip(before, column, strict=True))
        found = (
            replace(response, ahead=(x, y, yaw))
            if walk.kind == "ahead"
            else replace(response, sideways=(x, y, yaw))
        )
    for problem in _implausible(found, walk.kind):
        raise CommandError(f"{problem}. {ADVICE}")
    return found


def _twist(kind: str, pose: Pose) -> Twist:
    return (0.0, 0.0, pose[2]) if kind == "turn" else log_pose(pose)


def check_walk(walk: Walk) -> None:
    """Raises CommandError for a walk in which an error could not be seen, and one that is not straight."""
    if walk.kind == "turn":
        if abs(walk.odometry[2]) < LEAST_RAD:
            raise CommandError(
                f"the turn is {math.degrees(walk.odometry[2]):g} deg; allowed: {math.degrees(LEAST_RAD):g} "
                "deg or more either way, or its error cannot be seen: turn further, whole turns counted"
            )
        return
    way_mm = 1000.0 * walk.odometry[KINDS.index(walk.kind)]
    if abs(way_mm) < 1000.0 * LEAST_M:
        raise CommandError(
            f"the way {walk.kind} is {way_mm:g} mm; allowed: {1000.0 * LEAST_M:g} mm or more either way, or "
            "its error cannot be seen: walk further"
        )
    for pose in (walk.odometry, walk.true):
        if abs(pose[2]) > MOST_HEADING_RAD:
            raise CommandError(
                f"the heading changed by {math.degrees(pose[2]):g} deg; allowed: up to "
                f"{math.degrees(MOST_HEADING_RAD):g} deg either way in a straight walk: give degrees, left "
                "positive, or walk less far"
            )


def _implausible(found: WalkResponse, kind: str) -> list[str]:
    """What of the new column is out of the bounds of a calibration file."""
    values: list[tuple[str, float, Kind]]
    if kind == "turn":
        values = [("for a full turn by the feet, the turn", 360.0 * found.turn, TURN)]
    else:
        x, y, yaw = found.ahead if kind == "ahead" else found.sideways
        kinds = AHEAD.kinds if kind == "ahead" else SIDEWAYS.kinds
        what = "for a metre ahead by the feet" if kind == "ahead" else "for a metre to the left by the feet"
        values = [
            (f"{what}, the way ahead", 1000.0 * x, kinds[0]),
            (f"{what}, the way to the left", 1000.0 * y, kinds[1]),
            (f"{what}, the turn to the left", math.degrees(yaw), kinds[2]),
        ]
    problems = []
    for name, value, bounds in values:
        assert isinstance(bounds, Number)
        if not bounds.low <= value <= bounds.high:
            unit = bounds.unit.split()[0]
            problems.append(
                f"by this walk, {name} would truly be {value:.0f} {unit}; a trim allows "
                f"{bounds.low:g} to {bounds.high:g} {unit}"
            )
    return problems


def in_words(response: WalkResponse) -> list[str]:
    """What the response says, a line each."""
    lines = []
    for name, (x, y, yaw) in (("ahead", response.ahead), ("to the left", response.sideways)):
        lines.append(
            f"a metre {name} by the feet: {1000 * x:+.0f} mm ahead, {1000 * y:+.0f} mm left, "
            f"{math.degrees(yaw):+.1f} deg"
        )
    lines.append(f"a full turn by the feet: {360 * response.turn:.1f} deg")
    return lines
