"""Words for joints: the way a foot goes, by its kinematics, and postures that can be judged; rad."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from hobnail.motion.leg import LegKinematics
from hobnail.robot import Leg
from hobnail.workshop.calibrate.words import HIP, KNEE, ROLL, Place, looks, reference, spread, ways
from robots import anvil, bramble, juniper, stilt

LEGS = [leg for robot in (juniper(), bramble(), stilt(), anvil()) for leg in robot.legs]


def foot(leg: Leg, angles: list[float]) -> tuple[float, float, float]:
    roll, hip, knee = angles
    x, y, z = LegKinematics(leg).foot(roll, hip, knee)
    return float(x), float(y), float(z)


@pytest.mark.parametrize("leg", LEGS, ids=lambda leg: leg.name)
def test_the_words_are_what_the_kinematics_do(leg: Leg) -> None:
    start = [0.1, 0.3 * -leg.knee, 0.9 * leg.knee]
    at = foot(leg, start)
    for number in (ROLL, HIP, KNEE):
        moved = list(start)
        moved[number] += 0.05
        to = foot(leg, moved)
        plus, minus = ways(Place(leg, number))
        if number == ROLL:
            outward = (to[1] - at[1]) * (1 if leg.hip_m[1] > 0 else -1) > 0
            assert (plus, minus) == (("outward", "inward") if outward else ("inward", "outward"))
        elif number == HIP:
            assert to[0] < at[0]
            assert (plus, minus) == ("backward", "forward")
        else:
            # The hip pitch axis: a knee that bends brings the foot nearer to it.
            axis = foot(replace(leg, upper_m=1e-9, lower_m=1e-9), start)
            bends = math.dist(axis, to) < math.dist(axis, at)
            assert (plus, minus) == (("bends", "straightens") if bends else ("straightens", "bends"))


@pytest.mark.parametrize("robot", [juniper(), bramble(), stilt(), anvil()], ids=lambda robot: robot.name)
def test_every_joint_has_a_posture_that_it_reaches(robot) -> None:  # type: ignore[no-untyped-def]
    for leg in robot.legs:
        for number, joint in enumerate(leg.joints):
            posture = reference(Place(leg, number), joint)
            low, high = joint.angle_limits_rad
            assert low - 1e-9 <= posture.angle_rad <= high + 1e-9
            assert posture.words


def test_junipers_are_plumb_plumb_and_square() -> None:
    leg = juniper().legs[0]
    angles = [math.degrees(reference(Place(leg, k), leg.joints[k]).angle_rad) for k in range(3)]
    assert angles == [0.0, 0.0, -90.0]
    assert "a square fits" in reference(Place(leg, KNEE), leg.joints[KNEE]).words


def test_a_joint_that_gets_to_none_is_judged_by_a_protractor() -> None:
    leg = juniper().legs[0]
    joint = replace(leg.joints[HIP], angle_limits_rad=(math.radians(20), math.radians(61)))
    posture = reference(Place(leg, HIP), joint)
    assert math.degrees(posture.angle_rad) == pytest.approx(40.0)
    assert posture.words == "the upper link stands 40 deg from plumb, the knee to the rear"


@pytest.mark.parametrize("count", [2, 3, 5, 9])
def test_postures_are_spread_over_the_range(count: int) -> None:
    for leg in juniper().legs:
        for number, joint in enumerate(leg.joints):
            angles = [posture.angle_rad for posture in spread(Place(leg, number), joint, count)]
            assert len(angles) == count
            assert angles == sorted(angles)
            low, high = joint.angle_limits_rad
            assert low <= angles[0] < low + 0.15 * (high - low) + 0.05
            assert high - 0.15 * (high - low) - 0.05 < angles[-1] <= high


def test_looks_tell_the_side() -> None:
    left, right = juniper().legs[0], juniper().legs[1]
    assert "20 deg outward" in looks(Place(left, ROLL), math.radians(20))
    assert "20 deg inward" in looks(Place(right, ROLL), math.radians(20))
    assert "knee to the front" in looks(Place(left, HIP), math.radians(-90))
