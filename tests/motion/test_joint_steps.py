"""Joint steps by hand: excess and the last clamp; rad."""

from __future__ import annotations

import pytest

from hobnail.motion.joint_steps import clamp_steps, excess_step

STEPS = [(0.1, 0.2, 0.4), (0.1, 0.2, 0.4)]
BEFORE = [(0.0, 0.0, 0.0), (1.0, 1.0, 1.0)]


@pytest.mark.parametrize(
    ("after", "excess"),
    [
        ([(0.1, -0.2, 0.4), (1.0, 1.0, 1.0)], 0.0),
        ([(0.1, -0.2, 0.5), (1.0, 1.0, 1.0)], 1.25),
        ([(-0.2, 0.0, 0.0), (1.0, 0.4, 1.0)], 3.0),
    ],
)
def test_excess_is_the_greatest_step_as_a_multiple_of_its_own(
    after: list[tuple[float, float, float]], excess: float
) -> None:
    assert excess_step(BEFORE, after, STEPS) == pytest.approx(excess)


def test_clamp_holds_each_joint_to_its_step_and_counts() -> None:
    held, count = clamp_steps(BEFORE, [(0.3, -0.1, -0.5), (1.0, 1.5, 1.0)], STEPS)
    assert held[0] == pytest.approx((0.1, -0.1, -0.4))
    assert held[1] == pytest.approx((1.0, 1.2, 1.0))
    assert count == 3
