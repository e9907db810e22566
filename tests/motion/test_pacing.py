"""Reach, the shortest cycle, commands scaled to fit: against simulated steps and brute force; m, s, rad."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from numpy.typing import NDArray

from hobnail.motion.balance import neutral_feet
from hobnail.motion.foot import Foot
from hobnail.motion.foot_path import FootPath
from hobnail.motion.pacing import (
    fit_envelope,
    fit_stride,
    reach_radius,
    room_between_feet,
    within_limits,
)
from hobnail.motion.plan import GaitPlan, joint_speeds_rad_s
from hobnail.motion.planar import Twist
from hobnail.motion.rocking import burden
from hobnail.robot import Envelope, Gait, Robot, Vec2, Vec3
from hobnail.servo import reachable_rad
from robots import anvil, bramble, examples, fixed_robots, juniper, made_up, stilt

Array = NDArray[np.float64]
ROBOTS = pytest.mark.parametrize("robot", fixed_robots(), ids=lambda robot: robot.name)
speeds = st.floats(-2.0, 2.0)
twists = st.tuples(speeds, speeds, speeds)
ENVELOPE = Envelope(forward_m_s=0.25, sideways_m_s=0.12, turn_rad_s=0.9)


def feet_of(robot: Robot) -> list[Foot]:
    """The feet of a robot in its neutral stance."""
    return [
        Foot(
            leg,
            neutral,
            robot.stance.height_m,
            tuple(reachable_rad(joint) for joint in leg.joints),
            1.0 / len(robot.legs),
        )
        for leg, neutral in zip(robot.legs, neutral_feet(robot), strict=True)
    ]


# ---- reach


@ROBOTS
@pytest.mark.parametrize("lift_m", [0.0, 0.02])
def test_legs_reach_everywhere_within_their_radius_and_not_beyond(robot: Robot, lift_m: float) -> None:
    """At ground and at clearance: inside, every bearing is within the joint limits; a little
    farther out, some bearing is not."""
    for foot in feet_of(robot):
        radius = reach_radius(foot.kinematics, foot.limits, foot.from_hip, lift_m)
        assert radius > 0.01
        bearings = np.linspace(0.0, 2.0 * math.pi, 64)
        for share, expected in ((0.98, True), (0.5, True), (1.1, False)):
            found = []
            for lift in (0.0, lift_m):
                x = foot.from_hip[0] + share * radius * np.cos(bearings)
                y = foot.from_hip[1] + share * radius * np.sin(bearings)
                z = np.full_like(x, foot.from_hip[2] + lift)
                found.append(within_limits(foot.kinematics, foot.limits, x, y, z))
            assert bool(np.all(found)) is expected


@examples(100)
@given(robot=st.sampled_from(fixed_robots()), seed=st.integers(0, 2**32 - 1))
def test_within_limits_agrees_with_one_point_at_a_time(robot: Robot, seed: int) -> None:
    foot = feet_of(robot)[0]
    points = np.array(foot.from_hip) + np.random.default_rng(seed).uniform(-0.12, 0.12, (20, 3))
    found = within_limits(foot.kinematics, foot.limits, points[:, 0], points[:, 1], points[:, 2])
    for (x, y, z), ok in zip(points.tolist(), found, strict=True):
        try:
            angles = foot.kinematics.angles(x, y, z)
        except ValueError:
            assert not ok
        else:
            assert ok == all(low <= a <= high for a, (low, high) in zip(angles, foot.limits, strict=True))


@examples(100)
@given(
    feet=st.lists(st.tuples(st.floats(-0.3, 0.3), st.floats(-0.2, 0.2)), min_size=2, max_size=8),
    radius=st.floats(0.0, 0.02),
    seed=st.integers(0, 2**32 - 1),
)
def test_feet_that_keep_to_their_room_never_meet(feet: list[Vec2], radius: float, seed: int) -> None:
    room = room_between_feet(feet, [radius] * len(feet))
    assert min(room) >= 0.0
    random = np.random.default_rng(seed)
    for _ in range(20):
        bearings = random.uniform(0.0, 2.0 * math.pi, len(feet))
        moved = [
            (x + r * math.cos(b), y + r * math.sin(b))
            for (x, y), r, b in zip(feet, room, bearings, strict=True)
        ]
        for i, a in enumerate(moved):
            for j, b in enumerate(moved[:i]):
                if room[i] > 0.0 and room[j] > 0.0:
                    assert math.dist(a, b) >= 2.0 * radius - 1e-12


# ---- commands scaled to fit


@examples(200)
@given(twists)
def test_envelope_scales_as_a_whole(twist: Twist) -> None:
    fitted = fit_envelope(twist, ENVELOPE)
    size = np.linalg.norm(np.array(twist) / np.array([0.25, 0.12, 0.9]))
    if size <= 1.0:
        assert fitted == twist
    else:
        assert np.array(fitted) == pytest.approx(np.array(twist) / size, rel=1e-12, abs=1e-300)
    assert fit_envelope(fitted, ENVELOPE) == pytest.approx(fitted, rel=1e-12)


@examples(200)
@given(
    twist=twists,
    stance_s=st.floats(0.1, 2.0),
    feet=st.lists(st.tuples(st.floats(-0.3, 0.3), st.floats(-0.2, 0.2)), min_size=1, max_size=6),
    radius=st.floats(0.01, 0.2),
)
def test_stride_scales_as_a_whole_and_just_enough(
    twist: Twist, stance_s: float, feet: list[Vec2], radius: float
) -> None:
    """Afterwards the foot that sweeps most is at its radius, if it was beyond it."""
    radii = [radius * (1.0 + 0.1 * number) for number in range(len(feet))]

    def sweeps(of: Twist) -> list[float]:
        vx, vy, yaw_rate = of
        return [
            0.5 * stance_s * math.hypot(vx - yaw_rate * y, vy + yaw_rate * x) / most
            for (x, y), most in zip(feet, radii, strict=True)
        ]

    fitted = fit_stride(twist, stance_s, feet, radii)
    worst = max(sweeps(twist))
    if worst <= 1.0:
        assert fitted == twist
    else:
        assert max(sweeps(fitted)) == pytest.approx(1.0, rel=1e-9)
        assert np.array(fitted) == pytest.approx(np.array(twist) / worst, rel=1e-9, abs=1e-300)


@examples(20)
@given(robot=st.sampled_from(fixed_robots()) | made_up(), shares=twists, slow=st.floats(1.0, 3.0))
def test_a_plan_keeps_the_direction_and_never_asks_more(robot: Robot, shares: Twist, slow: float) -> None:
    """Whatever scales a command down scales it as a whole: the curve's shape stays."""
    limits = robot.envelope
    asked = (
        shares[0] * limits.forward_m_s,
        shares[1] * limits.sideways_m_s,
        shares[2] * limits.turn_rad_s,
    )
    assume(np.linalg.norm(shares) > 1e-3)
    feet = feet_of(robot)
    for gait in robot.gaits[:2]:
        plan = GaitPlan(robot, gait, feet)
        twist, rate_hz = plan.fit(asked, slow)
        share = float(np.dot(twist, asked) / np.dot(asked, asked))
        assert 0.0 < share <= 1.0 + 1e-12
        assert np.array(twist) == pytest.approx(share * np.array(asked), rel=1e-9, abs=1e-15)
        if gait.cycle_s is None:
            assert gait.cycle_range_s[0] - 1e-9 <= 1.0 / rate_hz <= gait.cycle_range_s[1] + 1e-9
        else:
            assert 1.0 / rate_hz == pytest.approx(gait.cycle_s)
        for foot, reach in zip(feet, plan.reach_m, strict=True):
            x, y = foot.neutral
            sweep = 0.5 * gait.duty / rate_hz * math.hypot(twist[0] - twist[2] * y, twist[1] + twist[2] * x)
            assert sweep <= reach * (1.0 + 1e-9)


# ---- the shortest cycle


def hardest_joint(foot: Foot, gait: Gait, velocity: Vec2, cycle_s: float, speeds_rad_s: Vec3) -> float:
    """Greatest joint speed of a steady straight step, simulated finely, as a share of its own."""
    u = np.linspace(0.0, 1.0, 801)
    path = FootPath(gait.swing)
    travel, lift = np.array([path.at(float(share))[:2] for share in u]).T
    airtime_s = (1.0 - gait.duty) * cycle_s
    # The foot flies a stride over the ground while the body goes on: from half a stance behind.
    ahead_s = travel * cycle_s - u * airtime_s - 0.5 * gait.duty * cycle_s
    angles = foot.kinematics.angles(
        foot.from_hip[0] + velocity[0] * ahead_s,
        foot.from_hip[1] + velocity[1] * ahead_s,
        foot.from_hip[2] + gait.lift_m * lift,
        xp=np,
    )
    step_s = airtime_s / (len(u) - 1)
    return max(
        float(np.abs(np.diff(angle)).max()) / step_s / most
        for angle, most in zip(angles, speeds_rad_s, strict=True)
    )


QUICK = pytest.mark.parametrize(
    ("robot", "name"),
    [
        (juniper(), "trot"),
        (juniper(), "pace"),
        (juniper(), "amble"),
        (bramble(), "tripod"),
        (stilt(), "trot"),
        (anvil(), "trot"),
    ],
    ids=lambda value: value if isinstance(value, str) else value.name,
)


@QUICK
@pytest.mark.parametrize("axis", [0, 1], ids=["ahead", "sideways"])
def test_cycle_is_the_shortest_that_the_servos_can_follow(robot: Robot, name: str, axis: int) -> None:
    """With nine tenths of the speed (at full command up to 1.3 times that, for a moment in the
    swing); a cycle a sixth shorter would ask for more, unless it is the shortest allowed.  Without
    a sway no cycle is kept from for rocking."""
    gait = replace(robot.gait(name), cycle_range_s=(0.1, 4.0), body_shift=0.0)
    feet = feet_of(robot)
    plan = GaitPlan(robot, gait, feet)
    most = joint_speeds_rad_s(robot, robot.supply.nominal_v)
    top = (robot.envelope.forward_m_s, robot.envelope.sideways_m_s)[axis]
    for share in (0.0, 0.25, 0.5, 1.0, -0.5, -1.0):
        asked = [0.0, 0.0, 0.0]
        asked[axis] = share * top
        (vx, vy, _), rate_hz = plan.fit((asked[0], asked[1], asked[2]), 1.0)
        cycle_s = 1.0 / rate_hz

        def hardest(
            cycle_s: float, velocity: Vec2 = (vx, vy), feet: list[Foot] = feet, gait: Gait = gait
        ) -> float:
            return max(
                hardest_joint(foot, gait, velocity, cycle_s, of) for foot, of in zip(feet, most, strict=True)
            )

        assert hardest(cycle_s) <= (1.2 if abs(share) > 0.5 else 1.0)
        assert hardest(cycle_s / 1.18) > 0.86


@ROBOTS
def test_a_slower_supply_gives_longer_cycles(robot: Robot) -> None:
    """In proportion, up to the longest allowed, but for the tick that each is rounded up to."""
    gait = replace(robot.gaits[0], cycle_range_s=(0.1, 10.0))
    plan = GaitPlan(robot, gait, feet_of(robot))
    asked = (0.1 * robot.envelope.forward_m_s, 0.0, 0.0)
    _, quick = plan.fit(asked, 1.0)
    _, slow = plan.fit(asked, 1.5)
    assert -1.5 * robot.period_s < 1.0 / slow - 1.5 / quick < robot.period_s


@ROBOTS
def test_automatic_cycles_are_whole_ticks(robot: Robot) -> None:
    """So that a steady walk recurs; but no longer than the gait's longest."""
    gait = replace(robot.gaits[0], cycle_range_s=(0.1, 10.0))
    plan = GaitPlan(robot, gait, feet_of(robot))
    for share in (0.1, 0.2, 0.3, 0.5):
        _, rate_hz = plan.fit((share * robot.envelope.forward_m_s, 0.0, 0.0), 1.0)
        ticks = 1.0 / rate_hz / robot.period_s
        assert ticks == pytest.approx(round(ticks), abs=1e-9)
    longest_s = 10.5 * robot.period_s
    short = replace(robot.gaits[0], cycle_range_s=(0.5 * longest_s, longest_s))
    _, rate_hz = GaitPlan(robot, short, feet_of(robot)).fit((robot.envelope.forward_m_s, 0.0, 0.0), 1.0)
    assert 1.0 / rate_hz <= longest_s * (1.0 + 1e-12)


@pytest.mark.parametrize("robot", [juniper(), stilt()], ids=lambda robot: robot.name)
def test_a_cycle_in_which_the_body_rocks_is_not_chosen(robot: Robot) -> None:
    """Of a range to choose from, by servos that are quick enough for all of it: neither on the spot
    nor on the way."""
    gait = replace(robot.gait("trot"), cycle_range_s=(0.25, 0.8))
    plan = GaitPlan(robot, gait, feet_of(robot))
    tried = tuple(np.geomspace(*gait.cycle_range_s, 12).tolist())
    heaviness = burden(robot, gait, tried)
    for share in (0.0, 0.5):
        _, rate_hz = plan.fit((share * robot.envelope.forward_m_s, 0.0, 0.0), 1.0)
        chosen = float(np.interp(1.0 / rate_hz, tried, heaviness))
        assert chosen <= np.median(heaviness)


def test_joint_speeds_by_hand() -> None:
    """0.13 s/60 deg is 8.055 rad/s at 6 V; nine tenths of that is usable; at 5 V five sixths."""
    robot = juniper()
    usable = robot.joints[0].servo.usable_speed
    expected = math.radians(60.0) / 0.13 * usable
    assert joint_speeds_rad_s(robot, 6.0)[0] == pytest.approx((expected,) * 3, rel=1e-12)
    assert joint_speeds_rad_s(robot, 5.0)[2] == pytest.approx((expected * 5 / 6,) * 3, rel=1e-12)


@ROBOTS
def test_a_robot_asked_for_far_too_much_still_walks(robot: Robot) -> None:
    """With an envelope thirty times what its legs can do, and with servos too slow for the
    gait even on the spot: a command is scaled down, not to nothing."""
    envelope = robot.envelope
    eager = replace(
        robot,
        envelope=replace(
            envelope,
            forward_m_s=30.0 * envelope.forward_m_s,
            sideways_m_s=30.0 * envelope.sideways_m_s,
            turn_rad_s=30.0 * envelope.turn_rad_s,
        ),
    )
    gait = replace(robot.gaits[0], cycle_range_s=(0.1, 0.12))
    plans = (
        GaitPlan(eager, robot.gaits[0], feet_of(robot)).fit((eager.envelope.forward_m_s, 0.0, 0.0), 1.0),
        GaitPlan(robot, gait, feet_of(robot)).fit((envelope.forward_m_s, 0.0, 0.0), 1.0),
    )
    for (vx, _, _), _ in plans:
        assert vx > 0.1 * envelope.forward_m_s
