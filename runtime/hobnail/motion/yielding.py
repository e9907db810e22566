"""What a body gives up of its posture and its shift so that every foot stays in reach; m, rad, s.

Feet on the ground must not be dragged, but how the body stands over them is a wish:
a tilt that the legs reach when standing may be too much in mid-stride.  Then one share
of all wishes is taken, as large as can be.  Nothing here knows limits of a posture
(`hobnail.controller`) or moves a foot.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

from hobnail.motion.planar import Pose
from hobnail.motion.whole_body import WholeBody
from hobnail.robot import Vec2

# What was given up comes back at this rate (of all, 1/s): a body that nods in every
# stride would be worse than one that stays level.
COMES_BACK_HZ = 1.0
LEAST_STEP = 1e-6  # of the share, on the way down
HALVINGS = 4  # of the last step down


class Yielding:
    """The `share` of its wishes that the body takes, and whether it is `moving`.

    A wish is what differs from standing level, unshifted, at `level_m`.
    """

    __slots__ = ("_level_m", "moving", "share")

    def __init__(self, level_m: float) -> None:
        self._level_m = level_m
        self.share = 1.0
        self.moving = False

    def solve(
        self,
        body: WholeBody,
        pose: Pose,
        shift_m: Vec2,
        posture: Sequence[float],
        time_s: float,
    ) -> None:
        """Solve for `body` (see there); `time_s` is for what was given up to come back."""
        if self.share == 1.0:  # as a rule
            body.solve(pose, shift_m, posture)
            if body.out_of_reach == 0:
                self.moving = False
                return

        def reached(share: float) -> bool:
            height, *others = posture
            self.share = share
            level = self._level_m
            taken = [height if share == 1.0 else level + share * (height - level)]
            taken += [share * value for value in others]
            body.solve(pose, (share * shift_m[0], share * shift_m[1]), taken)
            return body.out_of_reach == 0

        before = self.share
        if not reached(min(before + COMES_BACK_HZ * time_s, 1.0)) and not (
            self.share != before and reached(before)
        ):
            self._give_up(before, reached)
        self.moving = self.share != before

    def _give_up(self, before: float, reached: Callable[[float], bool]) -> None:
        """Take as large a share as leaves every foot in reach."""
        if not reached(0.0):
            reached(before)  # giving up helps nobody
            return
        # The step down is as small as can be: a tick that needs little must find little.
        low, high, step = before, before, LEAST_STEP
        while not reached(low := max(before - step, 0.0)):
            high, step = low, 4.0 * step
        for _ in range(HALVINGS):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if reached(middle) else (low, middle)
        reached(low)
