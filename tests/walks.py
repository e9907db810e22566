"""Walks of the real controller, recorded tick by tick, and what must hold of every one of them; m, rad, s.

Where the feet are on the ground is worked out here from the ticks alone, with
scipy's rotations and forward kinematics, not taken from the motion code.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from hobnail.controller import Controller, Tick
from hobnail.motion.leg import LegKinematics
from hobnail.motion.schedule import shares_by_feet_down
from hobnail.robot import Gait, Robot, Vec3
from hobnail.servo import JointMap

ON_THE_GROUND_M = 1e-4  # how far a standing foot may be from where it was put down

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
Command = Callable[["Walk"], None]


class Walk:
    """A controller and everything that it has done."""

    def __init__(self, robot: Robot, *, at_rest: bool = False, dt_s: float | None = None) -> None:
        self.robot = robot
        self.controller = Controller(robot, at_rest=at_rest)
        self.dt_s = dt_s or robot.period_s
        self.ticks: list[Tick] = []
        self.dts_s: list[float] = []
        self.supplies_v: list[float] = []

    def go(self, ticks: int) -> Walk:
        """Tick on."""
        for _ in range(ticks):
            tick = self.controller.tick(self.dt_s)
            self.ticks.append(tick)
            self.dts_s.append(self.dt_s)
            self.supplies_v.append(self.controller.supply_v)
        return self

    def walk(self, vx: float, vy: float, yaw_rate: float, pivot: tuple[float, float] = (0.0, 0.0)) -> Walk:
        """Command a velocity in shares of the envelope."""
        limits = self.robot.envelope
        self.controller.walk(
            vx * limits.forward_m_s, vy * limits.sideways_m_s, yaw_rate * limits.turn_rad_s, pivot
        )
        return self

    def set_posture(self, shares: Sequence[float]) -> Walk:
        """Command a posture in shares of its limits: height 0..1, the others -1..1."""
        limits = self.robot.posture_limits
        low, high = limits.height_m
        self.controller.posture(
            height_m=low + shares[0] * (high - low),
            roll_rad=shares[1] * limits.roll_rad,
            pitch_rad=shares[2] * limits.pitch_rad,
            yaw_rad=shares[3] * limits.yaw_rad,
            lean_m=(shares[4] * limits.lean_m, shares[5] * limits.lean_m),
        )
        return self

    def until_settled(self, most_s: float = 60.0) -> Walk:
        """Tick until nothing moves any more."""
        for _ in range(int(most_s / self.dt_s)):
            self.go(1)
            if self.ticks[-1].settled:
                return self
        raise AssertionError(f"not settled within {most_s} s")


# ---- what a walk was, as arrays


@dataclass(frozen=True)
class Record:
    """A walk in arrays, the first index counting ticks, the second legs."""

    joints_rad: Array
    commanded_rad: Array
    feet_m: Array  # body frame
    by_kinematics_m: Array  # the same from the joint angles
    on_ground_m: Array  # `feet_m` in the ground frame
    by_kinematics_on_ground_m: Array
    stance: Flags
    pose: Array
    slowdown: Array
    dt_s: Array
    time_s: Array  # of the robot's own going-on, at the end of each tick


def to_ground(walk: Walk, feet_m: Array) -> Array:
    """Feet from the body frame into the ground frame: body at (x, y, height), turned by
    yaw about z, then pitch about y, then roll about x."""
    pose = np.array([tick.pose for tick in walk.ticks])
    tilt = np.array([tick.tilt_rad for tick in walk.ticks])
    turned = Rotation.from_euler("ZYX", np.column_stack((pose[:, 2], tilt[:, 1], tilt[:, 0])))
    place = np.column_stack((pose[:, :2], [tick.height_m for tick in walk.ticks]))
    return np.stack([turned.apply(feet_m[:, leg]) + place for leg in range(feet_m.shape[1])], axis=1)


def record(walk: Walk) -> Record:
    """The arrays of a walk."""
    ticks = walk.ticks
    joints = np.array([tick.joints_rad for tick in ticks])
    feet = np.array([tick.feet_m for tick in ticks])
    found = np.empty_like(feet)
    for index, leg in enumerate(walk.robot.legs):
        at = LegKinematics(leg).foot(joints[:, index, 0], joints[:, index, 1], joints[:, index, 2], xp=np)
        found[:, index] = np.array(at).T + np.array(leg.hip_m)
    slowdown = np.array([tick.slowdown for tick in ticks])
    dt_s = np.array(walk.dts_s)
    return Record(
        joints_rad=joints,
        commanded_rad=np.array([tick.commanded_rad for tick in ticks]),
        feet_m=feet,
        by_kinematics_m=found,
        on_ground_m=to_ground(walk, feet),
        by_kinematics_on_ground_m=to_ground(walk, found),
        stance=np.array([tick.stance for tick in ticks]),
        pose=np.array([tick.pose for tick in ticks]),
        slowdown=slowdown,
        dt_s=dt_s,
        time_s=np.cumsum(slowdown * dt_s),
    )


def stance_slip_m(places: Array, stance: Flags, may_have_swung: Flags | None = None) -> float:
    """How far a standing foot ever was from where that stance began (m).

    `may_have_swung` marks ticks so long that a foot may have swung within one:
    those begin new stances.
    """
    worst = 0.0
    for leg in range(stance.shape[1]):
        down = stance[:, leg]
        starts = down & np.concatenate(([True], ~down[:-1]))
        if may_have_swung is not None:
            starts |= down & may_have_swung
        (at,) = np.nonzero(starts)
        which = np.cumsum(starts) - 1  # the stance that each tick belongs to
        moved = places[down, leg] - places[at[which[down]], leg]
        worst = max(worst, float(np.linalg.norm(moved, axis=1).max(initial=0.0)))
    return worst


def fewest_feet(gait: Gait) -> int:
    """The least number of feet that the gait's schedule has down."""
    return min(count for count, share in shares_by_feet_down(gait.duty, gait.phases).items() if share > 1e-9)


def shortest_swing_s(gait: Gait) -> float:
    """The shortest time that a foot of the gait is in the air."""
    return (1.0 - gait.duty) * (gait.cycle_s or gait.cycle_range_s[0])


# ---- what must hold of every walk


def assert_sound(walk: Walk) -> None:
    """Everything that design and issue promise of any walk whatever the commands."""
    found = record(walk)
    assert_feet_are_where_the_joints_put_them(found)
    assert_feet_stay_on_the_ground(walk, found)
    assert_joints_keep_their_steps(walk, found)
    assert_pulses_keep_their_limits(walk)
    assert_enough_feet_stand(walk)


def assert_feet_are_where_the_joints_put_them(found: Record) -> None:
    """`feet_m` agrees with forward kinematics of `joints_rad`."""
    assert np.abs(found.by_kinematics_m - found.feet_m).max() < 1e-9


def assert_feet_stay_on_the_ground(walk: Walk, found: Record) -> None:
    """Standing feet are on the ground, and stay where they are; swinging feet are not below it."""
    swings = {gait.name: shortest_swing_s(gait) for gait in walk.robot.gaits}
    long = np.array([dt >= swings[tick.gait] for dt, tick in zip(walk.dts_s, walk.ticks, strict=True)])
    radius = np.array([leg.foot_radius_m for leg in walk.robot.legs])
    for places in (found.on_ground_m, found.by_kinematics_on_ground_m):
        assert stance_slip_m(places, found.stance, long) < ON_THE_GROUND_M
        height = places[:, :, 2] - radius
        assert np.abs(height[found.stance]).max(initial=0.0) < ON_THE_GROUND_M
        assert height.min() > -ON_THE_GROUND_M


def assert_joints_keep_their_steps(walk: Walk, found: Record) -> None:
    """No joint goes farther in a tick than its servo's usable speed at that supply allows."""
    speeds = np.array(
        [
            [joint.servo.speed_rad_s * joint.servo.usable_speed / joint.servo.rated_v for joint in leg.joints]
            for leg in walk.robot.legs
        ]
    )
    allowed = speeds[None] * (found.dt_s * np.array(walk.supplies_v))[1:, None, None]
    for angles in (found.joints_rad, found.commanded_rad):
        steps = np.abs(np.diff(angles, axis=0))
        assert (steps <= allowed).all(), f"{(steps / allowed).max()} times the allowed step"
    assert all(tick.clamped == 0 for tick in walk.ticks)
    assert all(tick.out_of_reach == 0 for tick in walk.ticks)


def assert_pulses_keep_their_limits(walk: Walk) -> None:
    """Pulses stay within hard limits, and mean the commanded angles."""
    joints = walk.robot.joints
    pulses = np.array([tick.pulses_us for tick in walk.ticks])
    limits = np.array([joint.pulse_limits_us for joint in joints])
    assert (pulses >= limits[:, 0]).all()
    assert (pulses <= limits[:, 1]).all()
    commanded = np.array([np.ravel(tick.commanded_rad) for tick in walk.ticks])
    for index, joint in enumerate(joints):
        low, high = joint.angle_limits_rad
        assert commanded[:, index].min() >= low - 1e-12
        assert commanded[:, index].max() <= high + 1e-12
        there = JointMap(joint)
        for row in range(0, len(commanded), 7):
            assert abs(there.angle_rad(float(pulses[row, index])) - commanded[row, index]) < 1e-9


def assert_enough_feet_stand(walk: Walk) -> None:
    """Never fewer feet on the ground than the gait's schedule has at its least."""
    least = {gait.name: fewest_feet(gait) for gait in walk.robot.gaits}
    for tick in walk.ticks:
        assert sum(tick.stance) >= least[tick.gait]


# ---- commands at random


def _shares() -> st.SearchStrategy[float]:
    """From -1.3 to 1.3 of a limit, often exactly at it or at zero."""
    return st.sampled_from((0.0, 1.0, -1.0)) | st.floats(-1.3, 1.3)


def walks() -> st.SearchStrategy[Command]:
    """Velocities, some beyond the envelope, about pivots near and far."""
    pivots = st.just((0.0, 0.0)) | st.tuples(st.floats(-2.0, 2.0), st.floats(-2.0, 2.0))

    def command(values: tuple[float, float, float, tuple[float, float]]) -> Command:
        return lambda walk: void(walk.walk(*values))

    return st.tuples(_shares(), _shares(), _shares(), pivots).map(command)


def void(_: object) -> None:
    """Nothing, of anything."""


def stands() -> st.SearchStrategy[Command]:
    """To stand."""
    return st.just(lambda walk: walk.controller.stand())


def gaits() -> st.SearchStrategy[Command]:
    """Another gait of the robot."""
    return st.integers(0, 5).map(
        lambda number: (
            lambda walk: walk.controller.gait(walk.robot.gaits[number % len(walk.robot.gaits)].name)
        )
    )


def postures() -> st.SearchStrategy[Command]:
    """A posture within its limits."""
    tilts = st.floats(-1.0, 1.0)

    def command(values: tuple[float, ...]) -> Command:
        return lambda walk: void(walk.set_posture(values))

    return st.tuples(st.floats(0.0, 1.0), *[tilts] * 5).map(command)


def supplies() -> st.SearchStrategy[Command]:
    """A supply from a flat battery to a full one."""

    def command(share: float) -> Command:
        def set_supply(walk: Walk) -> None:
            walk.controller.supply_v = walk.robot.supply.nominal_v * share

        return set_supply

    return st.floats(0.5, 1.15).map(command)


def periods(*, longest_s: float = 0.2) -> st.SearchStrategy[Command]:
    """Another tick period from here on."""

    def command(dt_s: float) -> Command:
        def set_period(walk: Walk) -> None:
            walk.dt_s = dt_s

        return set_period

    return st.floats(0.002, longest_s).map(command)


def sequences(
    *kinds: st.SearchStrategy[Command], ticks: int = 60, most: int = 8
) -> st.SearchStrategy[list[tuple[Command, int]]]:
    """Commands of the kinds given, each with the number of ticks until the next."""
    return st.lists(st.tuples(st.one_of(*kinds), st.integers(1, ticks)), min_size=1, max_size=most)


def perform(walk: Walk, commands: Sequence[tuple[Command, int]]) -> Walk:
    """Do them in turn."""
    for command, ticks in commands:
        command(walk)
        walk.go(ticks)
    return walk


def swing_curves(found: Record, leg: int) -> list[tuple[Array, Array]]:
    """Each whole swing of a leg: its times (of the robot's own going-on) and places on the ground,
    the standing places before and after included."""
    up = ~found.stance[:, leg]
    edges = np.flatnonzero(np.diff(up.astype(int)))
    curves = []
    for lift, land in pairwise(edges):
        if up[lift + 1]:
            curves.append((found.time_s[lift : land + 2], found.on_ground_m[lift : land + 2, leg]))
    return curves


def vec3(values: Array) -> Vec3:
    """Three numbers of an array."""
    x, y, z = (float(value) for value in values)
    return x, y, z
