"""One foot as it walks: where it stands, and how it flies to its next place; m, s.

Standing places and swing paths are kept in the ground frame: a foot that
stands does not move there at all, so no error can add up to a slip.
"""

from __future__ import annotations

from hobnail.motion.foot_path import FootPath
from hobnail.motion.glide import AT_REST, Motion, settle
from hobnail.motion.leg import LegKinematics
from hobnail.motion.load import LegCorrection
from hobnail.motion.swung import SwungLeg
from hobnail.robot import Leg, Span, Vec2

# Share of the swing at its end in which the aim is left alone: a new aim would
# have to be reached in too short a time.
LAST_AIM = 0.15


class Swing:
    """A foot in the air; immutable, replaced when it is re-aimed.

    The foot goes from `start` towards an aim that glides to the `target`: the
    share of the way is that of the gait's foot path.
    """

    __slots__ = ("offset_x", "offset_y", "start", "target")

    def __init__(self, start: Vec2, target: Vec2, offset_x: Motion, offset_y: Motion) -> None:
        self.start = start
        self.target = target
        self.offset_x = offset_x
        self.offset_y = offset_y

    def re_aimed(self, target: Vec2 | None, time_s: float, remaining_s: float) -> Swing:
        """The swing `time_s` later, aimed at `target` (None: as before), which it meets
        at rest over the ground in `remaining_s`, counted from the start of that time."""
        (ex, vx, ax), (ey, vy, ay) = self.offset_x, self.offset_y
        if target is None:
            target = self.target
        else:
            ex += self.target[0] - target[0]
            ey += self.target[1] - target[1]
        return Swing(
            self.start,
            target,
            settle((ex, vx, ax), time_s, remaining_s),
            settle((ey, vy, ay), time_s, remaining_s),
        )

    @property
    def settled(self) -> bool:
        """Whether the aim rests on the target."""
        return self.offset_x is AT_REST and self.offset_y is AT_REST

    def at(self, path: FootPath, u: float) -> tuple[float, float, float, float, float]:
        """(x, y, lift share, bends of travel and lift) at the share `u` of the swing."""
        travel, lift, bend, rise = path.at(u)
        (x0, y0), (x1, y1) = self.start, self.target
        return (
            x0 + travel * (x1 + self.offset_x[0] - x0),
            y0 + travel * (y1 + self.offset_y[0] - y0),
            lift,
            bend,
            rise,
        )


FootState = tuple[float, float, float, float, float, Swing | None, bool]


class Foot:
    """A leg's fixed quantities and the state of its foot.

    `x`, `y` are the foot's place in the ground frame, `lift_m` its height above
    where it stands; `phase` is the share of the cycle since its touch-down;
    `load` the share of the robot's weight that it is taken to carry; `swung` says what
    moves with the foot.
    """

    __slots__ = (
        "correction",
        "from_hip",
        "hip",
        "kinematics",
        "lift_m",
        "limits",
        "load",
        "neutral",
        "neutral_rad",
        "offset",
        "phase",
        "radius_m",
        "stepped",
        "swing",
        "swung",
        "x",
        "y",
    )

    def __init__(
        self, leg: Leg, neutral: Vec2, height_m: float, limits: tuple[Span, ...], load: float
    ) -> None:
        """A foot standing at `neutral` (body frame, m) under a body origin at `height_m`."""
        self.kinematics = LegKinematics(leg)
        self.hip = x, y, z = leg.hip_m
        at = (neutral[0] - x, neutral[1] - y, leg.foot_radius_m - height_m - z)
        self.from_hip = at  # the neutral foot relative to its hip
        self.neutral_rad = self.kinematics.angles(*self.kinematics.nearest_reachable(*at))
        self.correction = LegCorrection(leg, self.kinematics, self.neutral_rad)
        self.radius_m = leg.foot_radius_m
        self.limits = limits
        self.neutral = neutral
        self.swung = SwungLeg(leg, self.kinematics, at, height_m)
        self.offset = 0.0  # the gait's relative phase
        self.phase = 0.0
        self.x, self.y = neutral
        self.lift_m = 0.0
        self.load = load
        self.swing: Swing | None = None
        self.stepped = True  # has swung since the gait (re)started

    def state(self) -> FootState:
        """A snapshot for `restore`."""
        return self.x, self.y, self.lift_m, self.phase, self.load, self.swing, self.stepped

    def restore(self, state: FootState) -> None:
        """Go back to a snapshot."""
        self.x, self.y, self.lift_m, self.phase, self.load, self.swing, self.stepped = state
