"""How far and how fast legs can step: reach around the neutral stance, the shortest
cycle that the servos can follow, and commands scaled to fit; m, s, rad.

Worked out with arrays once a gait is chosen; in the tick only looked up.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from hobnail.motion.foot_path import FootPath
from hobnail.motion.leg import LegKinematics
from hobnail.motion.planar import Twist, point_speed
from hobnail.robot import Envelope, Gait, Robot, Span, Vec2, Vec3

DIRECTIONS = 16  # in which reach is tried
GRID = 5  # foot velocities an axis, over the envelope
CYCLES = 12  # cycle times tried
SAMPLES = 20  # points along a swing
# The part of the allowed joint speed that the automatic cycle plans with: the rest is
# for arcs, changes of command and the corrections for load.
SPEED_SHARE = 0.9

# Load up to which a speed is offered: at the peak of its swing the robot slows for a moment.
FASTEST_LOAD = 1.3
# Of a servo too slow for that even on the spot, more: the robot is to walk, however slowly.
OVER_STANDING = 1.2
# In the choice of a cycle, beside the burdens of `hobnail.motion.rocking`: load at full speed up
# to which it costs nothing, what more costs, and how much is not told from still more.
EASY_LOAD = 1.15
OVERLOAD_COST = 8.0
MOST_OVERLOAD = 10.0
# Burden over that of the best cycle up to which a longer one may be gone over to at speed.
HEAVIER = 0.5
# Shares of the peak speed that are tried, close where an envelope asks far too much.
LEVELS = np.array([0.0, 1 / 96, 1 / 48, 1 / 24, *(k / 12 for k in range(1, 13))])

Array = NDArray[np.float64]


def reach_radius(
    kinematics: LegKinematics, limits_rad: Sequence[Span], neutral_m: Vec3, lift_m: float
) -> float:
    """Radius (m) of the largest disc about the neutral foot (relative to the hip) that
    the leg reaches within its joint limits, on the ground and at clearance."""
    bearings = np.linspace(0.0, 2.0 * math.pi, DIRECTIONS, endpoint=False)
    longest = kinematics.upper_m + kinematics.lower_m
    radii = np.linspace(0.0, longest, 128)[:, None]
    ok = np.ones(len(radii), dtype=bool)
    for lift in (0.0, lift_m):
        x = neutral_m[0] + radii * np.cos(bearings)
        y = neutral_m[1] + radii * np.sin(bearings)
        ok &= within_limits(kinematics, limits_rad, x, y, np.full_like(x, neutral_m[2] + lift)).all(axis=1)
    beyond = np.flatnonzero(~ok)
    return float(radii[max(int(beyond[0]) - 1, 0), 0] if len(beyond) else longest)


def within_limits(
    kinematics: LegKinematics, limits_rad: Sequence[Span], x: Array, y: Array, z: Array
) -> NDArray[np.bool_]:
    """Which of the points (relative to the hip, m) a leg reaches within its joint limits."""
    with np.errstate(invalid="ignore"):
        angles = kinematics.angles(x, y, z, xp=np)
        ok = np.ones(np.shape(angles[2]), dtype=bool)
        for angle, (low, high) in zip(angles, limits_rad, strict=True):
            ok &= (angle >= low) & (angle <= high)  # nan compares false
    return ok


def room_between_feet(feet: Sequence[Vec2], radii_m: Sequence[float]) -> list[float]:
    """Excursion (m) that each foot may make without meeting a neighbour that does likewise."""
    room = []
    for i, (x, y) in enumerate(feet):
        nearest = min(
            math.hypot(x - other[0], y - other[1]) - radii_m[i] - radii_m[j]
            for j, other in enumerate(feet)
            if j != i
        )
        room.append(max(0.5 * nearest, 0.0))
    return room


class CycleTable:
    """The shortest cycle at which every joint can follow, by foot velocity.

    Quick, small steps tip a robot least (common practice); what bounds them is
    the lift of the foot, and at speed the swing forward.  A body that rocks on
    its servos has cycles of its own to be kept from: the shortest of all is the
    one at which it is expected to walk best.  For each leg a grid
    over the foot's velocity holds the shortest cycle within the gait's range
    whose straight step keeps all three joints within their speed; between grid
    points it is interpolated.  `fastest_m_s` is the greatest foot velocity along
    x and along y, leg by leg, for which there is such a cycle at all.
    """

    __slots__ = ("_tables", "fastest_m_s", "range_s")

    def __init__(
        self,
        gait: Gait,
        legs: Sequence[LegKinematics],
        neutrals_m: Sequence[Vec3],
        speeds_rad_s: Sequence[Vec3],
        peaks_m_s: Sequence[Vec2],
        reaches_m: Sequence[float],
        burden: Callable[[tuple[float, ...]], Array] | None = None,
    ) -> None:
        """`neutrals_m` are relative to the hips; `speeds_rad_s` is what each joint may do;
        `peaks_m_s` the greatest foot velocity along x and y that commands can ask for;
        `reaches_m` how far from neutral a stance may lead a foot; `burden` what speaks
        against each cycle time (`hobnail.motion.rocking`)."""
        self.fastest_m_s: list[Vec2] = []
        self._tables: list[list[list[float]]] = []
        cycles = np.geomspace(*gait.cycle_range_s, CYCLES)
        levels = np.concatenate((-LEVELS[:0:-1], LEVELS))
        axis = np.linspace(-1.0, 1.0, GRID)
        nought = np.zeros(1)
        steps = [
            _StraightStep(gait, leg, neutral, speeds, reach, cycles)
            for leg, neutral, speeds, reach in zip(legs, neutrals_m, speeds_rad_s, reaches_m, strict=True)
        ]
        if burden:
            burdens = burden(tuple(cycles.tolist()))
            best = int(np.argmin(burdens + OVERLOAD_COST * _overload(steps, peaks_m_s)))
            heavy = np.flatnonzero(burdens[best:] > burdens[best] + HEAVIER)
            cycles = cycles[best : best + int(heavy[0]) if len(heavy) else None]
            for step in steps:
                step.take(cycles)
        self.range_s: Span = (float(cycles[0]), gait.cycle_range_s[1])
        for step, peaks in zip(steps, peaks_m_s, strict=True):
            fastest_x = _fastest(step.load(peaks[0] * levels, nought)[:, 0]) * peaks[0]
            fastest_y = _fastest(step.load(nought, peaks[1] * levels)[0]) * peaks[1]
            self.fastest_m_s.append((max(fastest_x, 1e-6), max(fastest_y, 1e-6)))
            self._tables.append(_shortest(step.load(fastest_x * axis, fastest_y * axis), cycles).tolist())

    def cycle_s(self, velocities_m_s: Sequence[Vec2], slow: float = 1.0) -> float:
        """Cycle time (s) for each leg's foot velocity over the ground (m/s); `slow` >= 1
        is by how much the servos are slower than the table assumed."""
        need = 0.0
        for table, (peak_x, peak_y), (vx, vy) in zip(
            self._tables, self.fastest_m_s, velocities_m_s, strict=True
        ):
            i, s = _place(vx / peak_x)
            j, t = _place(vy / peak_y)
            near = table[i][j] + t * (table[i][j + 1] - table[i][j])
            far = table[i + 1][j] + t * (table[i + 1][j + 1] - table[i + 1][j])
            need = max(need, near + s * (far - near))
        return min(max(need * slow, self.range_s[0]), self.range_s[1])


class _StraightStep:
    """How hard the joints of one leg work in a swing, by foot velocity and cycle."""

    def __init__(
        self,
        gait: Gait,
        leg: LegKinematics,
        neutral_m: Vec3,
        speeds_rad_s: Vec3,
        reach_m: float,
        cycles_s: Array,
    ) -> None:
        u = np.linspace(0.0, 1.0, SAMPLES)
        path = FootPath(gait.swing)
        shape = np.array([path.at(float(t)) for t in u])
        self._leg = leg
        self._neutral = neutral_m
        self._speeds = speeds_rad_s
        self._reach = reach_m
        self._duty = gait.duty
        # Over the ground the foot goes one stride; the body goes on under it.
        self._ahead = shape[:, 0] - 0.5 * gait.duty - u * (1.0 - gait.duty)
        self._up = gait.lift_m * shape[:, 1]
        self.take(cycles_s)

    def take(self, cycles_s: Array) -> None:
        """Go on with these cycle times only."""
        self._cycles = cycles_s
        self._step_s = (1.0 - self._duty) * cycles_s / (SAMPLES - 1)

    def load(self, vx: Array, vy: Array) -> Array:
        """Greatest joint speed as a share of what is planned with, shape (x, y, cycles);
        inf where the foot cannot go."""
        vx, vy = vx[:, None, None, None], vy[None, :, None, None]
        cycle = self._cycles[:, None]
        ahead = cycle * self._ahead
        x, y = np.broadcast_arrays(self._neutral[0] + vx * ahead, self._neutral[1] + vy * ahead)
        with np.errstate(invalid="ignore"):
            angles = self._leg.angles(x, y, self._neutral[2] + self._up, xp=np)
        load = np.zeros(x.shape[:-1])
        for angle, speed in zip(angles, self._speeds, strict=True):
            steps = np.abs(np.diff(angle, axis=-1)).max(axis=-1)
            load = np.maximum(load, steps / (self._step_s * speed * SPEED_SHARE))
        sweep = 0.5 * self._duty * cycle[:, 0] * np.hypot(vx, vy)[..., 0]
        out: Array = np.where(np.isnan(load) | (sweep > self._reach), np.inf, load)
        return out


def _overload(steps: Sequence[_StraightStep], peaks_m_s: Sequence[Vec2]) -> Array:
    """By how much the load at full speed is more than easy, for each cycle time."""
    both, nought = np.array([-1.0, 1.0]), np.zeros(1)
    loads = [
        step.load(x * both, nought).max(axis=(0, 1)) for step, (x, _) in zip(steps, peaks_m_s, strict=True)
    ]
    loads += [
        step.load(nought, y * both).max(axis=(0, 1)) for step, (_, y) in zip(steps, peaks_m_s, strict=True)
    ]
    overload: Array = np.clip(np.max(loads, axis=0) - EASY_LOAD, 0.0, MOST_OVERLOAD)
    return overload


def _fastest(load: Array) -> float:
    """The greatest share of the peak speed, the same both ways, up to which some cycle
    will do; `load` is over the levels both ways and the cycles."""
    least = load.min(axis=-1)
    standing = len(LEVELS) - 1
    ok = least <= max(FASTEST_LOAD, OVER_STANDING * float(least[standing]))
    both = ok[standing:] & ok[standing::-1]
    beyond = np.flatnonzero(~both)
    return float(LEVELS[beyond[0] - 1 if len(beyond) else -1])


def _place(share: float) -> tuple[int, float]:
    """Grid cell and place in it (0..1) of a value in -1..1, held to the grid's ends."""
    at = (min(max(share, -1.0), 1.0) + 1.0) * 0.5 * (GRID - 1)
    cell = min(int(at), GRID - 2)
    return cell, at - cell


def _shortest(load: Array, cycles: Array) -> Array:
    """Shortest cycle with load <= 1, between the tried ones by interpolation; where none
    will do, the one that comes nearest to it."""
    fits = load <= 1.0
    first = np.argmax(fits, axis=-1)
    found = np.take(cycles, first)
    before = np.maximum(first - 1, 0)
    high = np.take_along_axis(load, before[..., None], axis=-1)[..., 0]
    low = np.take_along_axis(load, first[..., None], axis=-1)[..., 0]
    with np.errstate(invalid="ignore", divide="ignore"):
        back = np.where(high > 1.0, (1.0 - low) / (high - low), 0.0)
    back = np.where(np.isfinite(back), back, 0.0)
    found = found - back * (found - np.take(cycles, before))
    shortest: Array = np.where(fits.any(axis=-1), found, np.take(cycles, np.argmin(load, axis=-1)))
    return shortest


def fit_envelope(twist: Twist, envelope: Envelope) -> Twist:
    """A twist at the body origin, scaled as a whole into the certified ellipsoid."""
    vx, vy, yaw_rate = twist
    size = math.sqrt(
        (vx / envelope.forward_m_s) ** 2
        + (vy / envelope.sideways_m_s) ** 2
        + (yaw_rate / envelope.turn_rad_s) ** 2
    )
    return twist if size <= 1.0 else (vx / size, vy / size, yaw_rate / size)


def fit_feet(twist: Twist, feet: Sequence[Vec2], fastest_m_s: Sequence[Vec2]) -> Twist:
    """A twist scaled as a whole so that no foot must go faster over the ground than it can."""
    vx, vy, yaw_rate = twist
    most = 1.0
    for (x, y), (along, across) in zip(feet, fastest_m_s, strict=True):
        most = max(most, abs(vx - yaw_rate * y) / along, abs(vy + yaw_rate * x) / across)
    return twist if most == 1.0 else (vx / most, vy / most, yaw_rate / most)


def fit_stride(twist: Twist, stance_s: float, feet: Sequence[Vec2], radii_m: Sequence[float]) -> Twist:
    """A twist scaled as a whole so that no foot's stance sweeps more than its reach allows.

    In a stance of `stance_s` a foot sweeps its speed times that, half of it on
    either side of neutral.
    """
    share = 1.0
    for (x, y), radius in zip(feet, radii_m, strict=True):
        sweep = 0.5 * stance_s * point_speed(twist, x, y)
        if sweep > radius:
            share = min(share, radius / sweep)
    return twist if share == 1.0 else (twist[0] * share, twist[1] * share, twist[2] * share)


def fit_steady(twist: Twist, cycle_s: float, strides: Vec3) -> Twist:
    """A twist scaled as a whole so that its stride keeps a slow gait's balance: what it
    takes ahead, sideways and in turning may together use up no more than the margin
    that each alone would (`hobnail.motion.steadiness`)."""
    # A robot without room for any stride has been brought to a stand before.
    size = sum(abs(v) * cycle_s / most for v, most in zip(twist, strides, strict=True) if v)
    return twist if size <= 1.0 else (twist[0] / size, twist[1] / size, twist[2] / size)


def peak_foot_velocities(robot: Robot, feet: Sequence[Vec2]) -> list[Vec2]:
    """Greatest foot velocity (m/s) along x and along y over the envelope, leg by leg."""
    envelope = robot.envelope
    return [
        (
            math.hypot(envelope.forward_m_s, envelope.turn_rad_s * y),
            math.hypot(envelope.sideways_m_s, envelope.turn_rad_s * x),
        )
        for x, y in feet
    ]
