"""Moving to targets that change: continuity, bounds and arrival, against scipy; any unit."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.interpolate import BPoly

from hobnail.motion.glide import EASE_S, Glide, Slew, minimum_jerk, settle
from robots import examples

RATES = (0.5, 2.0)
# Micro-steps: a change of the least number there is, in the least time there is, is nobody's command.
values = st.tuples(*[st.integers(-1_000_000, 1_000_000).map(lambda micro: micro / 1e6)] * 2)
# (target, time until the next one)
plans = st.lists(st.tuples(values, st.floats(0.0, 2.5)), min_size=1, max_size=6)
Plan = list[tuple[tuple[float, float], float]]


def test_minimum_jerk_at_a_quarter() -> None:
    """Flash & Hogan 1985."""
    assert minimum_jerk(0.25) == 0.103515625
    assert (minimum_jerk(0.0), minimum_jerk(1.0)) == (0.0, 1.0)


# ---- settle


@examples(200)
@given(
    st.tuples(*[st.floats(-2.0, 2.0)] * 3),
    st.floats(0.05, 3.0),
    st.floats(0.0, 1.0),
)
def test_settle_is_the_quintic_of_scipy(
    offset: tuple[float, float, float], remaining_s: float, share: float
) -> None:
    judge = BPoly.from_derivatives([0.0, remaining_s], [list(offset), [0.0, 0.0, 0.0]])
    time_s = share * remaining_s
    found = settle(offset, time_s, remaining_s)
    for order in range(3):
        assert found[order] == pytest.approx(
            float(judge.derivative(order)(time_s)) if order else float(judge(time_s)),
            abs=1e-9 * (1.0 + remaining_s**-order) * 100.0,
        )


@examples(100)
@given(st.tuples(*[st.floats(-2.0, 2.0)] * 3), st.lists(st.floats(0.01, 1.0), min_size=1, max_size=20))
def test_settling_in_steps_is_the_same_curve(offset: tuple[float, float, float], steps: list[float]) -> None:
    total = sum(steps) + 0.05
    there = offset
    gone = 0.0
    for step in steps:
        there = settle(there, step, total - gone)
        gone += step
    assert there == pytest.approx(settle(offset, gone, total), abs=1e-5)
    assert settle(there, 1.0, 0.5) == (0.0, 0.0, 0.0)


# ---- slew: velocities


@examples(200)
@given(plans)
def test_slew_never_passes_its_rates(plan: Plan) -> None:
    """The true bound is the rate itself, also when it has to turn round (proved in the tests'
    comment below; here by dense sampling)."""
    # From slope -w with |w| <= rate, over a change c in T >= 1.4143 * 1.5 c / rate:
    # slope <= rate (1 - s) (5.828 s - 1), whose greatest value on 0..1 is the rate.
    slew = Slew((0.0, 0.0))
    for target, time_s in plan:
        slew.aim(target, RATES)
        for _ in range(50):
            slew.advance(time_s / 50)
            for slope, rate in zip(slew.slope, RATES, strict=True):
                assert abs(slope) <= rate * (1.0 + 1e-4)


@examples(100)
@given(plans)
def test_slew_is_continuous_in_value_and_slope(plan: Plan) -> None:
    """No jump in either when a target changes; and the slope is that of the value."""
    slew = Slew((0.0, 0.0))
    step = 1e-7
    for target, time_s in plan:
        before = list(slew.value), list(slew.slope)
        slew.aim(target, RATES)
        assert (list(slew.value), list(slew.slope)) == before
        slew.advance(step)
        values = zip(slew.value, before[0], RATES, strict=True)
        assert all(abs(new - old) <= 1.01 * rate * step + 1e-12 for new, old, rate in values)
        slopes = zip(slew.slope, before[1], RATES, strict=True)
        assert all(abs(new - old) < 0.1 * rate for new, old, rate in slopes)
        slew.advance(time_s)
        value, slope = list(slew.value), list(slew.slope)
        slew.advance(step)
        mean = [0.5 * (a + b) for a, b in zip(slope, slew.slope, strict=True)]
        assert (np.array(slew.value) - value) / step == pytest.approx(np.array(mean), abs=1e-4)


@examples(100)
@given(plans)
def test_slew_follows_the_cubics_of_scipy_from_rest(plan: Plan) -> None:
    slew = Slew((0.0, 0.0))
    start = (0.0, 0.0)
    for target, time_s in plan:
        slew.aim(target, RATES)
        left = slew.remaining_s
        if left > 1e-6:  # else too short for a polynomial
            for share in (0.3, 0.4):
                slew.advance(share * left)
            for value, slope, a, b in zip(slew.value, slew.slope, start, target, strict=True):
                judge = BPoly.from_derivatives([0.0, left], [(a, 0.0), (b, 0.0)])
                assert value == pytest.approx(float(judge(0.7 * left)), abs=1e-9)
                assert slope == pytest.approx(float(judge.derivative()(0.7 * left)), abs=1e-6)
        slew.advance(left + time_s)
        start = target


@examples(200)
@given(plans)
def test_slew_is_not_thrown_past_its_targets(plan: Plan) -> None:
    """However targets change, values stay within all that was asked for, but for what a slope at
    its rate covers while it is taken off: 4/27 of EASE_S, and that of several changes in a row."""
    slew = Slew((0.0, 0.0))
    low, high = [0.0, 0.0], [0.0, 0.0]
    for target, time_s in plan:
        slew.aim(target, RATES)
        low, high = np.minimum(low, target).tolist(), np.maximum(high, target).tolist()
        for _ in range(40):
            slew.advance(time_s / 40)
            for value, least, most, rate in zip(slew.value, low, high, RATES, strict=True):
                room = 0.5 * rate * EASE_S
                assert least - room <= value <= most + room


@examples(100)
@given(plans)
def test_slew_arrives_exactly(plan: Plan) -> None:
    slew = Slew((0.0, 0.0))
    for target, time_s in plan:
        slew.aim(target, RATES)
        slew.advance(time_s)
    slew.advance(slew.remaining_s)
    assert tuple(slew.value) == plan[-1][0]
    assert slew.slope == [0.0, 0.0]
    assert not slew.moving


@examples(50)
@given(values, values)
def test_slew_from_rest_keeps_the_direction(start: tuple[float, float], target: tuple[float, float]) -> None:
    """All components move together: a command keeps its curve while it is taken up."""
    assume(start != target)
    slew = Slew(start)
    slew.aim(target, RATES)
    total = slew.remaining_s
    for _ in range(9):
        slew.advance(0.1 * total)
        shares = [
            (value - a) / (b - a)
            for value, a, b in zip(slew.value, start, target, strict=True)
            if abs(b - a) > 1e-6
        ]
        assert shares == pytest.approx([shares[0]] * len(shares), abs=1e-8) if shares else True


# ---- glide: positions


def slope_and_curve(glide: Glide) -> list[tuple[float, float]]:
    """Slope and curvature at this instant: of the quintic through six points ahead, exactly."""
    state = glide.state()
    rows = [glide.value]
    for _ in range(5):
        glide.advance(0.002)
        rows.append(glide.value)
    glide.restore(state)
    found = []
    for column in np.array(rows).T:
        fit = np.polynomial.Polynomial.fit(np.arange(6) * 0.002, column, 5).convert()
        found.append((float(fit.deriv(1)(0.0)), float(fit.deriv(2)(0.0))))
    return found


@examples(100)
@given(plans)
def test_glide_is_continuous_in_value_slope_and_curvature(plan: Plan) -> None:
    """A new target changes none of the three at that instant; in between it is polynomials
    whose ends `settle` joins to rest."""
    glide = Glide((0.0, 0.0), RATES)
    for target, time_s in plan:
        before = glide.value, slope_and_curve(glide)
        glide.aim(target)
        assert glide.value == before[0]
        for (slope, curve), (then_slope, then_curve) in zip(before[1], slope_and_curve(glide), strict=True):
            assert then_slope == pytest.approx(slope, abs=1e-6)
            assert then_curve == pytest.approx(curve, abs=1e-2)
        glide.advance(time_s)


@examples(200)
@given(values, st.floats(0.1, 2.0), st.floats(0.0, 1.0))
def test_glide_from_rest_is_minimum_jerk(target: tuple[float, float], within_s: float, share: float) -> None:
    """Flash & Hogan 1985."""
    glide = Glide((0.0, 0.0), RATES)
    glide.aim(target, within_s)
    glide.advance(share * within_s)
    assert glide.value == pytest.approx([goal * minimum_jerk(share) for goal in target], abs=1e-12)


@examples(200)
@given(st.lists(st.tuples(values, st.sampled_from((0.001, 0.01, 0.05, 0.3, 1.0))), min_size=1, max_size=12))
def test_glide_bounds_however_often_targets_change(plan: Plan) -> None:
    """The true bound on slopes is 1.6 times the rates, and no value goes farther beyond the
    targets given so far than a tenth of what its rate covers in a second."""
    glide = Glide((0.0, 0.0), RATES)
    low, high = [0.0, 0.0], [0.0, 0.0]
    for target, time_s in [*plan, (plan[-1][0], 5.0)]:
        glide.aim(target)
        low = [min(a, b) for a, b in zip(low, target, strict=True)]
        high = [max(a, b) for a, b in zip(high, target, strict=True)]
        steps = max(1, int(time_s / 0.01))
        for _ in range(steps):
            before = glide.value
            glide.advance(time_s / steps)
            for index, rate in enumerate(RATES):
                speed = abs(glide.value[index] - before[index]) * steps / time_s
                assert speed <= 1.6 * rate
                assert low[index] - 0.1 * rate <= glide.value[index] <= high[index] + 0.1 * rate


def test_glide_follows_a_target_that_moves_every_tick() -> None:
    """As from a joystick: within a third of a second, at the target's own pace."""
    glide = Glide((0.0,), (1.0,))
    for tick in range(1, 301):
        glide.aim((0.005 * tick,))
        glide.advance(0.01)
    assert 1.5 - 0.33 * 0.5 < glide.value[0] < 1.5


def test_the_same_target_again_changes_nothing() -> None:
    once, often = Glide((0.0, 0.0), RATES), Glide((0.0, 0.0), RATES)
    once.aim((1.0, -0.5))
    for _ in range(100):
        often.aim((1.0, -0.5))
        once.advance(0.01)
        often.advance(0.01)
        assert once.value == often.value


@examples(200)
@given(plans)
def test_glide_from_rest_keeps_its_rates(plan: Plan) -> None:
    """A motion from rest peaks at its rate or below (1.875 times the mean, Flash & Hogan 1985)."""
    glide = Glide((0.0, 0.0), RATES)
    for target, _ in plan:
        glide.aim(target)
        before = glide.value
        while glide.moving:
            glide.advance(0.01)
            for a, b, rate in zip(before, glide.value, RATES, strict=True):
                assert abs(b - a) <= 0.01 * rate * (1.0 + 1e-9)
            before = glide.value


@examples(100)
@given(plans)
def test_glide_arrives_exactly_and_together(plan: Plan) -> None:
    glide = Glide((0.0, 0.0), RATES)
    for target, time_s in plan:
        glide.aim(target)
        glide.advance(time_s)
    for _ in range(10_000):
        if not glide.moving:
            break
        glide.advance(0.01)
    assert tuple(glide.value) == plan[-1][0]


def test_glide_within_a_time_arrives_then() -> None:
    glide = Glide((0.0, 0.0), RATES)
    glide.aim((1.0, -1.0), within_s=0.7)
    glide.advance(0.69)
    assert glide.moving
    glide.advance(0.0100001)
    assert not glide.moving
    assert glide.value == [1.0, -1.0]


def test_an_old_motion_is_taken_off_soon() -> None:
    """A slope at its rate, and no way left to go: it ends within three times EASE_S, not at once."""
    glide = Glide((0.0,), (1.0,))
    glide.aim((1.0,))
    glide.advance(0.5 * 1.875)  # at the peak: slope 1.0
    here = glide.value[0]
    glide.aim((here,))
    glide.advance(EASE_S)
    assert glide.value[0] > here + 0.04
    glide.advance(2.01 * EASE_S)
    assert glide.value == [here]
    assert not glide.moving


# ---- snapshots


@examples(50)
@given(plans, st.floats(0.0, 1.0))
def test_restore_goes_back_to_the_bit(plan: Plan, time_s: float) -> None:
    slew, glide = Slew((0.0, 0.0)), Glide((0.0, 0.0), RATES)
    for target, pause_s in plan:
        slew.aim(target, RATES)
        glide.aim(target)
        slew.advance(pause_s)
        glide.advance(pause_s)
    before = slew.state(), glide.state()
    slew.advance(time_s)
    glide.advance(time_s)
    once = list(slew.value), list(glide.value)
    slew.restore(before[0])
    glide.restore(before[1])
    slew.advance(time_s)
    glide.advance(time_s)
    assert (list(slew.value), list(glide.value)) == once


def test_jump_sets_one_component_only() -> None:
    slew = Slew((1.0, 2.0))
    slew.aim((3.0, 4.0), RATES)
    slew.advance(0.1)
    value, slope = slew.value, slew.slope
    slew.jump(1, 9.0)
    assert slew.value == [value[0], 9.0]
    assert slew.slope == [slope[0], 0.0]
