"""Advice on a horn's seat: by how many teeth of its spline to turn it, which way, and what is left; rad.

A trim that is larger than half a tooth can be made smaller by taking the horn
off and putting it on again, which gives the joint its travel back.  25 teeth are
usual for servos of standard size (common practice); others have 21, 23 or 24.
"""

from __future__ import annotations

import math
from typing import NamedTuple

TEETH = 25
TEETH_RANGE = (10, 60)


class Seat(NamedTuple):
    """`teeth` to turn the horn by, positive in the sense in which the joint's angle grows; and the
    trim that stays, rad."""

    teeth: int
    left_rad: float


def better_seat(trim_rad: float, direction: int, teeth: int = TEETH) -> Seat | None:
    """How to seat the horn better; None when no seat is.

    shaft = direction * (angle - zero) + trim: the joint stands back from where
    its shaft would have it by direction * trim.
    """
    tooth_rad = math.tau / teeth
    count = round(trim_rad / tooth_rad)
    return Seat(direction * count, trim_rad - count * tooth_rad) if count else None


def advice(seat: Seat, ways: tuple[str, str], teeth: int = TEETH) -> str:
    """The same in words; `ways` is what the foot does as the joint's angle grows and shrinks."""
    count = abs(seat.teeth)
    degrees = 360.0 * count / teeth
    way = {"bends": "bent", "straightens": "straightened"}
    turned = ways[0 if seat.teeth > 0 else 1]
    return (
        f"The horn sits wrong by {count} {'tooth' if count == 1 else 'teeth'} of a spline of {teeth}: switch "
        f"the servo supply off, take the horn off its shaft, turn the link that it drives by "
        f"{degrees:.1f} deg, {way.get(turned, turned)}, and put it on again. The trim left would be "
        f"{math.degrees(seat.left_rad):+.1f} deg. Then measure "
        "it again. (For another spline: --teeth.)"
    )
