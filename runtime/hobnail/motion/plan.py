"""What a gait means on one robot, worked out once when it is chosen; m, s, rad."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import partial

from hobnail.motion.balance import GRAVITY_M_S2, centre_of_mass
from hobnail.motion.foot import Foot
from hobnail.motion.foot_path import FootPath
from hobnail.motion.pacing import (
    CycleTable,
    fit_envelope,
    fit_feet,
    fit_steady,
    fit_stride,
    peak_foot_velocities,
    reach_radius,
    room_between_feet,
)
from hobnail.motion.planar import Twist
from hobnail.motion.reach import CycleReach, fit_shift
from hobnail.motion.rocking import burden, rocks
from hobnail.motion.schedule import load_ramp
from hobnail.motion.steadiness import least_margin, steady_strides
from hobnail.motion.support import support_centre
from hobnail.motion.sway import Inertia, PeriodicSway
from hobnail.robot import Gait, Robot, Span, Vec2, Vec3

# Of a tick: that much is no reason to take one more.
ROUNDING = 1e-6
# Of a slow gait's margin on the spot, what speeding up and slowing down may use.
SPEEDING_SHARE = 0.2
# Ratio of the longest to the shortest cycle above which it matters which is chosen.
WIDE = 1.1


class GaitPlan:
    """A gait on a robot: its foot path, sway and load transfer, how far each foot may be
    led from neutral, and how commands are fitted to all that."""

    __slots__ = (
        "_cycle_reach",
        "_neutral",
        "_robot",
        "_strides",
        "_table",
        "acceleration_m_s2",
        "com_m",
        "gait",
        "load_ramp",
        "path",
        "reach_m",
        "sway",
    )

    def __init__(self, robot: Robot, gait: Gait, feet: Sequence[Foot]) -> None:
        self._robot = robot
        self.gait = gait
        self.path = FootPath(gait.swing)
        self._neutral: list[Vec2] = [foot.neutral for foot in feet]
        self.load_ramp = load_ramp(gait.duty)
        neutrals = [foot.from_hip for foot in feet]
        room = room_between_feet(self._neutral, [foot.radius_m for foot in feet])
        discs = [
            reach_radius(foot.kinematics, foot.limits, neutral, gait.clearance_m)
            for foot, neutral in zip(feet, neutrals, strict=True)
        ]
        self.reach_m = [min(disc, space) for disc, space in zip(discs, room, strict=True)]
        shifting = fit_shift(gait, self._neutral, robot.stance.height_m, discs)
        com_x, com_y, com_z = centre_of_mass(robot, [foot.neutral_rad for foot in feet])
        self.com_m: Vec2 = (com_x, com_y)
        inertia = Inertia(robot.mass_kg, robot.stance.height_m + com_z, [foot.swung for foot in feet])
        self.sway = PeriodicSway(self._neutral, shifting, inertia)
        self._cycle_reach = CycleReach(gait, self.path, self.sway, self._neutral, discs)
        self.acceleration_m_s2 = math.inf
        self._strides: Vec3 | None = None
        if self.sway.leads:
            longest = 2.0 * max(self.reach_m)
            arm = math.sqrt(sum(x * x + y * y for x, y in self._neutral) / len(feet))
            centre = support_centre(self._neutral, robot.gaits[0].duty, robot.gaits[0].phases)
            self._strides = steady_strides(self._neutral, shifting, centre, (longest, longest, longest / arm))
            if self._strides:
                # Speeding up moves the zero-moment point as well.
                margin = least_margin(self._neutral, shifting, centre, (0.0, 0.0, 0.0))
                self.acceleration_m_s2 = SPEEDING_SHARE * margin * GRAVITY_M_S2 / robot.stance.height_m
        self._table: CycleTable | None = None
        if gait.cycle_s is None:
            self._table = CycleTable(
                gait,
                [foot.kinematics for foot in feet],
                neutrals,
                joint_speeds_rad_s(robot, robot.supply.nominal_v),
                peak_foot_velocities(robot, self._neutral),
                self.reach_m,
                partial(burden, robot, gait) if rocks(gait) and _is_wide(gait.cycle_range_s) else None,
            )

    def fit(self, twist: Twist, slow_supply: float) -> tuple[Twist, float]:
        """The command that is walked for the one asked, and its cycle rate (1/s): scaled as
        a whole into the envelope and into what servos, reach and balance allow."""
        twist = fit_envelope(twist, self._robot.envelope)
        if self._table:
            twist = fit_feet(twist, self._neutral, self._table.fastest_m_s)
        cycle_s = self._cycle_s(twist, slow_supply)
        within = fit_stride(twist, cycle_s * self.gait.duty, self._neutral, self.reach_m)
        within = self._cycle_reach.fit(within, cycle_s)
        if within is not twist:
            cycle_s = min(cycle_s, self._cycle_s(within, slow_supply))  # short steps may be quick ones
        if self._strides:
            within = fit_steady(within, cycle_s, self._strides)
        return within, 1.0 / cycle_s

    def _cycle_s(self, twist: Twist, slow_supply: float) -> float:
        """Time of a cycle at that twist: the gait's own, or the shortest for the servos."""
        if not self._table:
            assert self.gait.cycle_s is not None
            return self.gait.cycle_s
        vx, vy, yaw_rate = twist
        velocities = [(vx - yaw_rate * y, vy + yaw_rate * x) for x, y in self._neutral]
        cycle_s = self._table.cycle_s(velocities, slow_supply)
        # In whole ticks, a steady walk recurs.
        ticks = cycle_s / self._robot.period_s
        whole = math.ceil(ticks - ROUNDING) * self._robot.period_s
        return whole if whole <= self._table.range_s[1] else cycle_s


def _is_wide(cycle_range_s: Span) -> bool:
    """Whether there is a choice to be made."""
    return cycle_range_s[1] > WIDE * cycle_range_s[0]


def joint_speeds_rad_s(robot: Robot, supply_v: float) -> list[Vec3]:
    """Speed that each joint may be asked for, leg by leg: the no-load speed, of which
    `usable_speed` is taken, in proportion to the supply voltage."""
    speeds = []
    for leg in robot.legs:
        a, b, c = (
            joint.servo.speed_rad_s * joint.servo.usable_speed * supply_v / joint.servo.rated_v
            for joint in leg.joints
        )
        speeds.append((a, b, c))
    return speeds
