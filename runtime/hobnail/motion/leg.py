"""Kinematics of one roll-pitch-pitch leg: foot point <-> joint angles, m and rad.

Coordinates are relative to the hip, along the body axes (x forward, y left,
z up).  The formula of the leg is that of `hobnail.robot.Leg`.  Scalars and
arrays are taken alike: pass `numpy` as `xp` for arrays, which names the same
functions as `math`.  Joint limits are not known here, only geometry.
"""

from __future__ import annotations

import math
from types import ModuleType
from typing import Any

from hobnail.robot import Leg, Vec3

# Kept from the straight and from the fully folded leg, as a share of its length:
# there the knee would need an infinite speed to follow its foot.
SINGULAR_MARGIN = 1e-6


class LegKinematics:
    """Closed-form kinematics of one leg.

    The foot lies in the leg's plane, which the roll joint tilts about the x
    axis and which stands off the hip by d.  In that plane the hip pitch and
    knee are a two-link arm (Lynch & Park, Modern Robotics, section 6.1).
    """

    __slots__ = (
        "_d2",
        "_l_product",
        "_l_squares",
        "abduction_m",
        "farthest2",
        "knee",
        "lower_m",
        "nearest2",
        "upper_m",
    )

    def __init__(self, leg: Leg) -> None:
        self.abduction_m = leg.abduction_m
        self.upper_m = leg.upper_m
        self.lower_m = leg.lower_m
        self.knee = float(leg.knee)
        self._d2 = leg.abduction_m**2
        self._l_squares = leg.upper_m**2 + leg.lower_m**2
        self._l_product = 2.0 * leg.upper_m * leg.lower_m
        shortest = abs(leg.upper_m - leg.lower_m)
        longest = leg.upper_m + leg.lower_m
        slack = SINGULAR_MARGIN * longest
        # A foot is in reach exactly between two spheres about the hip and outside the
        # cylinder of radius d about the roll axis.
        self.nearest2 = (shortest + slack) ** 2 + self._d2
        self.farthest2 = (longest - slack) ** 2 + self._d2

    def angles(self, x: Any, y: Any, z: Any, xp: ModuleType = math) -> tuple[Any, Any, Any]:
        """Joint angles (roll, hip pitch, knee pitch) that put the foot at (x, y, z).

        Of the solutions it is the one with the foot below the roll axis and the
        knee bent to the leg's own side.  Out of reach, `math` raises ValueError
        and `numpy` gives nan.
        """
        d = self.abduction_m
        depth2 = y * y + z * z - self._d2
        depth = xp.sqrt(depth2)
        cos_knee = (x * x + depth2 - self._l_squares) / self._l_product
        knee = self.knee * xp.acos(cos_knee)
        along = self.upper_m + self.lower_m * cos_knee
        across = self.knee * self.lower_m * xp.sqrt(1.0 - cos_knee * cos_knee)
        return (
            xp.atan2(d * z + depth * y, d * y - depth * z),
            xp.atan2(-x * along - depth * across, depth * along - x * across),
            knee,
        )

    def foot(self, roll: Any, hip: Any, knee: Any, xp: ModuleType = math) -> tuple[Any, Any, Any]:
        """Foot point (x, y, z) relative to the hip for three joint angles."""
        shank = hip + knee
        x = -self.upper_m * xp.sin(hip) - self.lower_m * xp.sin(shank)
        down = -self.upper_m * xp.cos(hip) - self.lower_m * xp.cos(shank)
        c, s = xp.cos(roll), xp.sin(roll)
        d = self.abduction_m
        return x, d * c - down * s, d * s + down * c

    def knee_point(self, roll: Any, hip: Any, xp: ModuleType = math) -> tuple[Any, Any, Any]:
        """Knee point (x, y, z) relative to the hip."""
        down = -self.upper_m * xp.cos(hip)
        c, s = xp.cos(roll), xp.sin(roll)
        d = self.abduction_m
        return -self.upper_m * xp.sin(hip), d * c - down * s, d * s + down * c

    def nearest_reachable(self, x: float, y: float, z: float) -> Vec3:
        """The point in reach of the bare geometry that lies nearest to (x, y, z).

        In the half plane of x and the distance from the roll axis, reach is what lies
        between two circles about the hip and beyond a line: the nearest point is on
        one of the three, or where two of them meet.
        """
        rim = abs(self.abduction_m) * (1.0 + 1e-9)
        nearest, farthest = math.sqrt(self.nearest2), math.sqrt(self.farthest2)
        lateral = math.hypot(y, z)
        distance = math.hypot(x, lateral)
        if lateral >= rim and nearest <= distance <= farthest:
            return x, y, z
        candidates = [(x, rim)] if nearest <= math.hypot(x, rim) <= farthest else []
        for radius in (nearest, farthest):
            candidates.append((math.copysign(math.sqrt(max(radius * radius - rim * rim, 0.0)), x), rim))
            if distance > 0.0 and lateral * radius >= rim * distance:
                candidates.append((x * radius / distance, lateral * radius / distance))
        along, out = min(candidates, key=lambda at: math.hypot(at[0] - x, at[1] - lateral))
        if lateral == 0.0:  # on the roll axis every direction is as near
            return along, math.copysign(out, self.abduction_m), 0.0
        return along, y * out / lateral, z * out / lateral
