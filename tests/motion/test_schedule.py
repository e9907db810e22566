"""The gait clock against Hildebrand's gait diagrams and rational arithmetic; shares of the cycle."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.motion.schedule import events, feet_down, intervals, leg_phase, shares_by_feet_down
from robots import examples


def symmetrical(lag: float) -> tuple[float, ...]:
    """Touch-downs of Hildebrand's symmetrical gaits: left hind, left fore, right hind, right fore."""
    return (0.0, lag, 0.5, (0.5 + lag) % 1.0)


@pytest.mark.parametrize(
    ("duty", "lag", "shares"),
    [
        # Hildebrand, Science 150:701 (1965), his gait diagrams as shares by feet down; recomputed.
        (0.75, 0.25, {3: 1.0}),
        (0.5, 0.5, {2: 1.0}),
        (0.625, 0.25, {2: 0.5, 3: 0.5}),
        (0.4, 0.5, {0: 0.2, 2: 0.8}),
        (0.6, 0.5, {2: 0.8, 4: 0.2}),
        (0.8, 0.2, {3: 0.8, 4: 0.2}),
    ],
)
def test_shares_of_the_cycle_by_feet_down(duty: float, lag: float, shares: dict[int, float]) -> None:
    found = {
        count: share for count, share in shares_by_feet_down(duty, symmetrical(lag)).items() if share > 1e-9
    }
    assert found.keys() == shares.keys()
    for count, share in shares.items():
        assert found[count] == pytest.approx(share, rel=1e-9)


@examples(200)
@given(st.floats(0.05, 0.98), st.lists(st.floats(0.0, 1.0, exclude_max=True), min_size=4, max_size=8))
def test_mean_of_the_feet_down_is_the_sum_of_duties(duty: float, phases: list[float]) -> None:
    """Four feet: 4 beta (Hildebrand 1965)."""
    shares = shares_by_feet_down(duty, phases)
    assert sum(shares.values()) == pytest.approx(1.0, abs=1e-9)
    assert sum(count * share for count, share in shares.items()) == pytest.approx(
        len(phases) * duty, abs=1e-6
    )


@examples(200)
@given(
    st.integers(1, 47),
    st.lists(st.integers(0, 47), min_size=4, max_size=8),
    st.integers(-48, 96),
)
def test_feet_down_agrees_with_rational_arithmetic(duty: int, phases: list[int], clock: int) -> None:
    """At places well between events, in units of a 48th."""
    instant = Fraction(2 * clock + 1, 96)
    wanted = tuple((instant - Fraction(phase, 48)) % 1 < Fraction(duty, 48) for phase in phases)
    assert feet_down(duty / 48, [phase / 48 for phase in phases], float(instant)) == wanted


def test_a_foot_stands_from_its_touch_down_for_the_duty_factor() -> None:
    assert feet_down(0.25, (0.5,), 0.5) == (True,)
    assert feet_down(0.25, (0.5,), 0.749) == (True,)
    assert feet_down(0.25, (0.5,), 0.75) == (False,)
    assert feet_down(0.25, (0.5,), 0.499) == (False,)
    assert leg_phase(0.25, 0.5) == 0.75


@pytest.mark.parametrize(
    ("lag", "order"),
    [
        # Hildebrand 1965: lateral sequence, the fore foot on the same side follows the hind
        # one; diagonal sequence, the fore foot on the other side does.
        (0.25, ["left hind", "left fore", "right hind", "right fore"]),
        (0.75, ["left hind", "right fore", "right hind", "left fore"]),
    ],
)
def test_order_of_touch_downs(lag: float, order: list[str]) -> None:
    names = ("left hind", "left fore", "right hind", "right fore")
    duty, phases = 0.8, symmetrical(lag)
    seen = []
    before = feet_down(duty, phases, -1e-4)
    for step in range(2000):
        now = feet_down(duty, phases, step / 2000 + 1e-4)
        seen += [name for name, was, is_down in zip(names, before, now, strict=True) if is_down and not was]
        before = now
    assert seen == order


@examples(100)
@given(st.floats(0.05, 0.98), st.lists(st.floats(0.0, 1.0, exclude_max=True), min_size=1, max_size=8))
def test_intervals_tile_the_cycle_and_hold_one_support_each(duty: float, phases: list[float]) -> None:
    pieces = intervals(duty, phases)
    assert sum(length for _, length, _ in pieces) == pytest.approx(1.0, abs=1e-9)
    assert [start for start, _, _ in pieces] == events(duty, phases)
    for start, length, down in pieces:
        for share in (0.1, 0.9):
            if length > 1e-9:
                assert feet_down(duty, phases, start + share * length) == down


def test_events_that_coincide_count_once() -> None:
    """A trot of duty 1/2 has two events: at each, one pair takes over from the other."""
    assert events(0.5, symmetrical(0.5)) == [0.0, 0.5]
