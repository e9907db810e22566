"""All joint angles at once, by hand: excess, the last clamp, limits, legs; rad."""

from __future__ import annotations

import pytest

from hobnail.motion.joint_vector import clamp_steps, excess_step, held, legwise, within

STEPS = [0.1, 0.2, 0.4] * 2
BEFORE = [0.0, 0.0, 0.0, 1.0, 1.0, 1.0]


@pytest.mark.parametrize(
    ("after", "excess"),
    [
        ([0.1, -0.2, 0.4, 1.0, 1.0, 1.0], 0.0),
        ([0.1, -0.2, 0.5, 1.0, 1.0, 1.0], 1.25),
        ([-0.2, 0.0, 0.0, 1.0, 0.4, 1.0], 3.0),
    ],
)
def test_excess_is_the_greatest_step_as_a_multiple_of_its_own(after: list[float], excess: float) -> None:
    assert excess_step(BEFORE, after, STEPS) == pytest.approx(excess)


def test_clamp_holds_each_joint_to_its_step() -> None:
    after = [0.3, -0.1, -0.5, 1.0, 1.5, 1.0]
    assert clamp_steps(BEFORE, after, STEPS) == pytest.approx([0.1, -0.1, -0.4, 1.0, 1.2, 1.0])
    assert clamp_steps(BEFORE, BEFORE, STEPS) == BEFORE


def test_ranges() -> None:
    low, high = [-0.1] * 3, [0.1, 0.2, 0.3]
    assert within(low, [-0.1, 0.2, 0.0], high)
    assert not within(low, [-0.1, 0.2, 0.31], high)
    assert not within(low, [-0.11, 0.2, 0.0], high)
    assert held(low, [-0.2, 0.5, 0.3], high) == [-0.1, 0.2, 0.3]


def test_legs_are_three_joints_each() -> None:
    assert legwise([1.0, 2.0, 3.0, 4.0, 5.0, 6.0]) == ((1.0, 2.0, 3.0), (4.0, 5.0, 6.0))
