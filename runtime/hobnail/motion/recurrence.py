"""When a steady walk comes round, so that a cycle of it need not be worked out again.

A walk at a constant pace, whose cycle is a whole number of ticks, is after each cycle
where it was before, relative to its body: only the body has moved on.  Whether it is
so is not assumed but looked at, when a cycle has been kept.  Nothing here moves a foot
(`hobnail.motion.walker`) or knows what a tick holds (`hobnail.controller`).
"""

from __future__ import annotations

from collections.abc import Sequence
from math import cos, sin
from typing import Generic, NamedTuple, TypeVar

from hobnail.motion.feed_forward import FeedForwardState
from hobnail.motion.foot import FootState, Swing
from hobnail.motion.glide import GlideState, SlewState
from hobnail.motion.planar import Pose, compose
from hobnail.motion.sway import SwayState
from hobnail.robot import Vec2

# What may differ after a cycle (m, rad, rad/s): rounding, and nothing that a servo could show.
ROUNDING = 1e-9
LONGEST = 2000  # ticks that are kept

T = TypeVar("T")


# What `WalkState` names, in its order.
PlainState = tuple[
    Pose, float, float, float, SwayState, SlewState, GlideState, Sequence[FootState], FeedForwardState
]


class WalkState(NamedTuple):
    """All that changes as a robot walks at one pace, posture and gait."""

    pose: Pose
    clock: float
    hold: float
    share: float
    shift: SwayState
    pace: SlewState
    posture: GlideState
    feet: Sequence[FootState]
    feed_forward: FeedForwardState


class Recurrence(Generic[T]):
    """The latest ticks of a steady walk: kept for a cycle, then given again.

    `turning` says that they have come round, and that `again` has the next tick.
    """

    __slots__ = ("_kept", "_lap", "_moved", "_next", "turning")

    def __init__(self) -> None:
        self._kept: list[tuple[PlainState, T]] = []
        self._next = 0
        self._lap: Pose = (0.0, 0.0, 0.0)  # how a cycle moves what stands on the ground
        self._moved: Pose = (0.0, 0.0, 0.0)  # all cycles since those that were kept
        self.turning = False

    def clear(self) -> None:
        """Forget what was kept."""
        self._kept = []
        self.turning = False

    def keep(self, start: PlainState, tick: T, ticks_a_cycle: float) -> None:
        """Keep a tick of a steady walk, and the state that it was taken from."""
        length = round(ticks_a_cycle)
        if length > LONGEST or abs(ticks_a_cycle - length) > ROUNDING * ticks_a_cycle:
            return
        kept = self._kept
        if len(kept) == length:
            first, _ = kept[0]
            # The first leg's angles tell as a rule.
            if _near(first[-1][0][0], start[-1][0][0]) and comes_round(
                WalkState._make(first), WalkState._make(start)
            ):
                self._lap = self._moved = motion_between(first[0], start[0])
                self._next = 1
                self.turning = True
                return
            del kept[0]
        kept.append((start, tick))

    def again(self) -> tuple[T, Pose]:
        """The next tick as it was kept, and by what to move it over the ground."""
        if self._next == len(self._kept):
            self._next, self._moved = 0, compose(self._lap, self._moved)
        _, tick = self._kept[self._next]
        self._next += 1
        return tick, self._moved

    def state(self) -> WalkState:
        """Where the walk is now, as if every tick had been worked out."""
        if self._next == len(self._kept):
            self._next, self._moved = 0, compose(self._lap, self._moved)
        start, _ = self._kept[self._next]
        return moved_over_ground(WalkState._make(start), self._moved)


def comes_round(first: WalkState, later: WalkState) -> bool:
    """Whether a walk is where it was, relative to its body, but for rounding."""
    return (
        _near(first.feed_forward, later.feed_forward)
        and abs((later.clock - first.clock + 0.5) % 1.0 - 0.5) <= ROUNDING
        and max(first.hold, later.hold) <= 0.0
        and (first.share, first.pace, first.posture) == (later.share, later.pace, later.posture)
        and _near(first.shift, later.shift)
        and all(_alike(a, first.pose, b, later.pose) for a, b in zip(first.feet, later.feet, strict=True))
    )


def _alike(first: FootState, first_pose: Pose, later: FootState, later_pose: Pose) -> bool:
    (x0, y0, lift0, phase0, load0, swing0, stepped0) = first
    (x1, y1, lift1, phase1, load1, swing1, stepped1) = later
    places, later_places = [(x0, y0)], [(x1, y1)]
    if swing0 and swing1:
        if not (swing0.settled and swing1.settled):
            return False
        places += [swing0.start, swing0.target]
        later_places += [swing1.start, swing1.target]
    return (
        (swing0 is None, stepped0) == (swing1 is None, stepped1)
        and abs((phase1 - phase0 + 0.5) % 1.0 - 0.5) <= ROUNDING
        and _near((lift0, load0), (lift1, load1))
        and _near(
            [_seen_from(first_pose, place) for place in places],
            [_seen_from(later_pose, place) for place in later_places],
        )
    )


def _near(a: object, b: object) -> bool:
    """Whether two nests of tuples and lists have the same shape and nearly the same numbers."""
    if isinstance(a, tuple | list) and isinstance(b, tuple | list):
        return len(a) == len(b) and all(map(_near, a, b))
    return isinstance(a, float) and isinstance(b, float) and abs(a - b) <= ROUNDING


def _seen_from(pose: Pose, place: Vec2) -> Vec2:
    x, y, yaw = pose
    c, s = cos(yaw), sin(yaw)
    dx, dy = place[0] - x, place[1] - y
    return c * dx + s * dy, c * dy - s * dx


def motion_between(first: Pose, later: Pose) -> Pose:
    """The motion over the ground that takes the first pose to the later one."""
    yaw = later[2] - first[2]
    c, s = cos(yaw), sin(yaw)
    return later[0] - c * first[0] + s * first[1], later[1] - s * first[0] - c * first[1], yaw


def moved_over_ground(state: WalkState, by: Pose) -> WalkState:
    """A state with all that stands on the ground moved by a planar motion."""

    def moved(place: Vec2) -> Vec2:
        x, y, _ = compose(by, (*place, 0.0))
        return x, y

    feet: list[FootState] = []
    for x, y, lift, phase, load, swing, stepped in state.feet:
        if swing:
            swing = Swing(moved(swing.start), moved(swing.target), swing.offset_x, swing.offset_y)
        feet.append((*moved((x, y)), lift, phase, load, swing, stepped))
    return state._replace(pose=compose(by, state.pose), feet=feet)
