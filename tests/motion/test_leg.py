"""Leg kinematics against pinocchio, published arms and brute force; m and rad."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from hobnail.motion.leg import SINGULAR_MARGIN, LegKinematics
from hobnail.robot import Leg, Vec3
from pinocchio_judge import LegJudge
from robots import bramble, examples, fixed_robots, juniper, legs

# Angles whose foot the closed form gives back: knee bent, foot below the roll axis.
rolls = st.floats(-1.2, 1.2)
hips = st.floats(-1.2, 1.2)
folds = st.floats(0.05, 3.0)
anywhere = st.tuples(*[st.floats(-0.8, 0.8)] * 3)


def bent(leg: Leg, roll: float, hip: float, fold: float) -> Vec3:
    """Joint angles with the knee bent to the leg's own side and the foot below the roll axis."""
    angles = (roll, hip, leg.knee * fold)
    down = leg.upper_m * math.cos(hip) + leg.lower_m * math.cos(hip + leg.knee * fold)
    assume(down > 0.05 * (leg.upper_m + leg.lower_m))
    return angles


def design_leg() -> LegKinematics:
    """The leg of the reference values: d .03, links .1 and .1, left."""
    return LegKinematics(replace(juniper().legs[0], abduction_m=0.03, upper_m=0.1, lower_m=0.1))


@pytest.mark.parametrize(
    ("angles", "foot"),
    [
        # Derived from the formula of the leg with rotation matrices; to 1e-6.
        ((0.0, math.radians(-30), math.radians(60)), (0.0, 0.03, -0.173205)),
        ((math.radians(10), math.radians(30), math.radians(-60)), (0.0, 0.059621, -0.165364)),
        ((0.2, 0.3, -0.9), (0.026912, 0.064778, -0.168558)),
    ],
)
def test_foot_of_the_reference_leg(angles: Vec3, foot: Vec3) -> None:
    assert design_leg().foot(*angles) == pytest.approx(foot, abs=1e-6)


def test_two_link_arm_of_lynch_and_park() -> None:
    """Modern Robotics, example 6.1 (memory): links 1 and 1, both branches.

    Their arm lies along +x and turns in the xy plane; a hanging leg is that arm
    with its x axis down and its y axis backward.
    """
    x, y = (math.sqrt(3.0) - 1.0) / 2.0, (math.sqrt(3.0) + 1.0) / 2.0
    for knee, expected in ((1, (30.0, 90.0)), (-1, (120.0, -90.0))):
        leg = LegKinematics(replace(juniper().legs[0], abduction_m=0.0, upper_m=1.0, lower_m=1.0, knee=knee))
        roll, hip, fold = leg.angles(-y, 0.0, -x)
        assert roll == pytest.approx(0.0, abs=1e-12)
        assert (math.degrees(hip), math.degrees(fold)) == pytest.approx(expected, rel=1e-9)
        assert leg.foot(0.0, hip, fold) == pytest.approx((-y, 0.0, -x), abs=1e-12)


@examples(300)
@given(legs(), rolls, hips, st.floats(-3.0, 3.0))
def test_foot_agrees_with_pinocchio(leg: Leg, roll: float, hip: float, knee: float) -> None:
    ours = LegKinematics(leg).foot(roll, hip, knee)
    theirs = LegJudge(leg).foot((roll, hip, knee))
    assert [h + o for h, o in zip(leg.hip_m, ours, strict=True)] == pytest.approx(theirs, abs=1e-9)


@examples(300)
@given(legs(), rolls, hips, folds)
def test_angles_give_the_foot_that_pinocchio_put_there(
    leg: Leg, roll: float, hip: float, fold: float
) -> None:
    """Closed form inverts pinocchio's forward kinematics to 1e-9 m, and finds the same branch."""
    judge = LegJudge(leg)
    wanted = bent(leg, roll, hip, fold)
    at = judge.foot(wanted)
    x, y, z = (a - h for a, h in zip(at, leg.hip_m, strict=True))
    found = LegKinematics(leg).angles(x, y, z)
    assert judge.foot(found) == pytest.approx(at, abs=1e-9)
    assert found == pytest.approx(wanted, abs=1e-6)
    assert found[2] * leg.knee > 0.0


@examples(200)
@given(legs(), rolls, hips, folds)
def test_angles_to_foot_to_angles(leg: Leg, roll: float, hip: float, fold: float) -> None:
    kinematics = LegKinematics(leg)
    wanted = bent(leg, roll, hip, fold)
    assert kinematics.angles(*kinematics.foot(*wanted)) == pytest.approx(wanted, abs=1e-7)


@examples(50)
@given(legs(), st.integers(0, 2**32 - 1))
def test_arrays_give_what_scalars_give(leg: Leg, seed: int) -> None:
    """One formula for both: only the last bits may differ, numpy having functions of its own."""
    kinematics = LegKinematics(leg)
    angles = np.random.default_rng(seed).uniform(-1.0, 1.0, (3, 20))
    feet = np.array(kinematics.foot(angles[0], angles[1], angles[2], xp=np))
    knees = np.array(kinematics.knee_point(angles[0], angles[1], xp=np))
    with np.errstate(invalid="ignore"):
        back = np.array(kinematics.angles(feet[0], feet[1], feet[2], xp=np))
    for column in range(20):
        roll, hip, knee = (float(angle) for angle in angles[:, column])
        assert feet[:, column] == pytest.approx(kinematics.foot(roll, hip, knee), abs=1e-14)
        assert knees[:, column] == pytest.approx(kinematics.knee_point(roll, hip), abs=1e-14)
        x, y, z = (float(v) for v in feet[:, column])
        try:
            scalars = kinematics.angles(x, y, z)
        except ValueError:
            assert np.isnan(back[:, column]).any()
        else:
            assert back[:, column] == pytest.approx(scalars, abs=1e-6)


def test_knee_point_is_one_upper_link_from_the_hip_and_one_lower_link_from_the_foot() -> None:
    for leg in (juniper().legs[1], bramble().legs[2]):
        kinematics = LegKinematics(leg)
        roll, hip, knee = 0.2, -0.5, 1.1
        knee_at = np.array(kinematics.knee_point(roll, hip))
        axis = leg.abduction_m * np.array([0.0, math.cos(roll), math.sin(roll)])
        assert np.linalg.norm(knee_at - axis) == pytest.approx(leg.upper_m, rel=1e-12)
        foot = np.array(kinematics.foot(roll, hip, knee))
        assert np.linalg.norm(foot - knee_at) == pytest.approx(leg.lower_m, rel=1e-12)


def test_out_of_reach_raises_for_scalars_and_is_nan_for_arrays() -> None:
    kinematics = LegKinematics(juniper().legs[0])
    with pytest.raises(ValueError, match="math domain"):
        kinematics.angles(0.0, 0.045, -1.0)
    with np.errstate(invalid="ignore"):
        angles = kinematics.angles(np.zeros(1), np.full(1, 0.045), np.full(1, -1.0), xp=np)
    assert np.isnan(angles[2]).all()


# ---- the nearest point in reach


@examples(300)
@given(legs(), anywhere)
def test_nearest_reachable_is_in_reach(leg: Leg, target: Vec3) -> None:
    kinematics = LegKinematics(leg)
    at = kinematics.nearest_reachable(*target)
    angles = kinematics.angles(*at)  # does not raise
    assert kinematics.foot(*angles) == pytest.approx(at, abs=1e-9)


@examples(200)
@given(legs(), rolls, hips, folds)
def test_nearest_reachable_leaves_alone_what_is_in_reach(
    leg: Leg, roll: float, hip: float, fold: float
) -> None:
    kinematics = LegKinematics(leg)
    at = kinematics.foot(*bent(leg, roll, hip, fold))
    assert kinematics.nearest_reachable(*at) == at


@examples(400)
@given(legs(), anywhere, st.integers(0, 2**32 - 1))
def test_no_other_point_in_reach_is_nearer(leg: Leg, target: Vec3, seed: int) -> None:
    """Against two thousand other points in reach: random ones, and the nearest of them improved."""
    kinematics = LegKinematics(leg)
    at = kinematics.nearest_reachable(*target)
    distance = math.dist(at, target)
    random = np.random.default_rng(seed)
    roll, hip, knee = random.uniform(-math.pi, math.pi, (3, 1000))
    for spread in (0.0, 0.1):
        if spread:
            # Around the best so far.
            roll, hip, knee = (best + random.normal(0.0, spread, 1000) for best in (roll, hip, knee))
        others = np.array(kinematics.foot(roll, hip, knee, xp=np))
        distances = np.linalg.norm(others - np.array(target)[:, None], axis=0)
        first = int(np.argmin(distances))
        roll, hip, knee = roll[first], hip[first], knee[first]
        # Straight and fully folded legs are left out by a hair.
        slack = 1e-4 * (leg.upper_m + leg.lower_m) * (SINGULAR_MARGIN * 1e6)
        assert distance <= distances[first] + slack


@pytest.mark.parametrize("robot", fixed_robots(), ids=lambda robot: robot.name)
def test_nearest_reachable_beyond_the_straight_leg_is_along_the_line_to_the_hip(robot: object) -> None:
    """By hand: a point straight below the leg's plane is brought up that plane."""
    for leg in robot.legs:  # type: ignore[attr-defined]
        kinematics = LegKinematics(leg)
        x, y, z = kinematics.nearest_reachable(0.0, leg.abduction_m, -10.0)
        longest = math.hypot(leg.upper_m + leg.lower_m, leg.abduction_m)
        assert math.hypot(x, y, z) == pytest.approx(longest, rel=1e-5)
        assert x == 0.0
        assert y / z == pytest.approx(leg.abduction_m / -10.0, rel=1e-9)
