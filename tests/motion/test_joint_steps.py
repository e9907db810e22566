"""Joint steps and limits by hand; rad."""

from __future__ import annotations

import pytest

from hobnail.motion.joint_steps import clamp_limits, clamp_steps, excess_step
from hobnail.robot import Vec3

STEP = (0.1, 0.2, 0.4)
BEFORE = [(0.0, 0.0, 0.0), (1.0, 1.0, 1.0)]


@pytest.mark.parametrize(
    ("after", "excess"),
    [
        ([(0.1, -0.2, 0.4), (1.0, 1.0, 1.0)], 0.0),
        ([(0.1, -0.2, 0.5), (1.0, 1.0, 1.0)], 1.25),
        ([(-0.2, 0.0, 0.0), (1.0, 0.4, 1.0)], 3.0),
    ],
)
def test_excess_is_the_greatest_step_as_a_multiple_of_its_own(after: list[Vec3], excess: float) -> None:
    assert excess_step(BEFORE, after, [STEP, STEP]) == pytest.approx(excess)


def test_clamps_hold_each_joint_to_its_step_and_to_its_limits() -> None:
    assert clamp_steps(BEFORE[0], (0.3, -0.1, -0.5), STEP) == pytest.approx((0.1, -0.1, -0.4))
    assert clamp_steps(BEFORE[1], (1.0, 1.5, 1.0), STEP) == pytest.approx((1.0, 1.2, 1.0))
    limits = [(-0.1, 0.1), (-0.1, 0.2), (-0.1, 0.3)]
    assert clamp_limits((-0.2, 0.1, 0.5), limits) == (-0.1, 0.1, 0.3)
