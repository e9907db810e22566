"""The built-in gaits: duty factor and touch-down phases from hip positions (m, body frame).

A phase is the share of the cycle at which a leg touches down; it stands until
phase + duty.  Legs are told apart by where their hips are, so that any order of
legs gives the same gait.  Nothing here moves a foot.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from hobnail.robot import Span, Vec3


@dataclass(frozen=True, slots=True, kw_only=True)
class GaitPattern:
    """The numbers of a gait: `phases` in the order of the hips given; `cycle_times` the
    shortest and longest automatic cycle, in times of the body as a pendulum."""

    duty: float
    phases: tuple[float, ...]
    cycle_times: Span
    body_shift: float = 0.0

    def cycle_range_s(self, height_m: float) -> Span:
        """Bounds of the automatic cycle of a robot that stands so high: a body tips over its
        feet, and must be caught, in the time sqrt(z/g) of the inverted pendulum."""
        time_s = math.sqrt(height_m / 9.81)
        return self.cycle_times[0] * time_s, self.cycle_times[1] * time_s


# Hildebrand, Science 150:701 (1965): duty factor, and D, the lag of the fore foot after
# the hind foot on the same side; the sides are half a cycle apart.  Then the cycle times:
# a trot must be quick (our rehearsals), a crawl must not.  Last, how far the body shifts over
# its supports: in a pace not over the feet of one side altogether.  A little beyond them it
# would fall over; a little short of them it comes down on the feet that are to land anyhow.
_SYMMETRICAL = {
    "trot": (0.6, 0.5, (2.3, 4.6), 1.0),
    "crawl": (0.8, 0.25, (9.0, 30.0), 1.0),  # lateral sequence
    "pace": (0.7, 0.0, (2.3, 4.6), 0.8),
    "amble": (0.7, 0.25, (4.0, 9.0), 1.0),
}
TRIPOD_TIMES = (4.0, 14.0)
WAVE_TIMES = (14.0, 45.0)
# A foot is lifted by this share of the stance height where nothing else is said.
LIFT_SHARE = 0.1

BUILT_IN_GAITS = (*_SYMMETRICAL, "tripod", "wave")


def built_in_gait(name: str, hips: Sequence[Vec3]) -> GaitPattern:
    """The built-in gait `name` for legs whose hips are at `hips`.

    Raises ValueError, with the reason in words, for an unknown name or legs that it does not suit.
    """
    if name not in BUILT_IN_GAITS:
        raise ValueError(f"there is no built-in gait {name}")
    left, right = _rows(hips)
    if name in _SYMMETRICAL:
        if len(left) != 2:
            raise ValueError(f"{name} is for four legs, two a side")
        duty, lag, cycle_times, body_shift = _SYMMETRICAL[name]
        return GaitPattern(
            duty=duty,
            phases=_placed(len(hips), left, (0.0, lag), right, (0.5, (0.5 + lag) % 1.0)),
            cycle_times=cycle_times,
            body_shift=body_shift,
        )
    if len(left) < 3:
        raise ValueError(f"{name} is for six legs or more, as many on either side")
    rows = range(len(left))
    if name == "tripod":  # neighbours, along a side and across, step by turns
        return GaitPattern(
            duty=0.6,
            cycle_times=TRIPOD_TIMES,
            phases=_placed(
                len(hips), left, [row % 2 / 2 for row in rows], right, [(row + 1) % 2 / 2 for row in rows]
            ),
        )
    # A wave runs from hind to fore along each side, the sides half a cycle apart:
    # touch-downs are spread evenly, and a swing of 0.8 of their spacing lifts one leg at a time.
    legs = len(hips)
    return GaitPattern(
        duty=1.0 - 0.8 / legs,
        cycle_times=WAVE_TIMES,
        phases=_placed(legs, left, [row / legs for row in rows], right, [0.5 + row / legs for row in rows]),
    )


def _rows(hips: Sequence[Vec3]) -> tuple[list[int], list[int]]:
    """Indices of the left and of the right legs, each from hind to fore."""
    by_x = sorted(range(len(hips)), key=lambda index: hips[index][0])
    left = [index for index in by_x if hips[index][1] > 0.0]
    right = [index for index in by_x if hips[index][1] < 0.0]
    if len(left) != len(right) or len(left) + len(right) != len(hips):
        raise ValueError("built-in gaits need as many legs on the left as on the right")
    return left, right


def _placed(
    count: int,
    left: Sequence[int],
    left_phases: Sequence[float],
    right: Sequence[int],
    right_phases: Sequence[float],
) -> tuple[float, ...]:
    phases = [0.0] * count
    for index, phase in [*zip(left, left_phases, strict=True), *zip(right, right_phases, strict=True)]:
        phases[index] = phase
    return tuple(phases)


def fewest_feet_down(duty: float, phases: Sequence[float]) -> int:
    """The least number of feet that the schedule ever has on the ground."""
    # The count falls only at lift-offs: look just after each.
    lift_offs = [(phase + duty) % 1.0 for phase in phases]
    return min(
        sum((instant - phase) % 1.0 < duty - 1e-9 for phase in phases)
        for instant in ((lift_off + 1e-7) % 1.0 for lift_off in lift_offs)
    )
