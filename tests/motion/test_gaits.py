"""Built-in gaits against Hildebrand's touch-downs and shares of the cycle by feet down.

Source: Hildebrand, Science 150:701 (1965); McGhee & Frank, Math. Biosci. 3:331 (1968) (memory).
"""

from __future__ import annotations

import itertools
from fractions import Fraction

import pytest

from hobnail.motion.gaits import BUILT_IN_GAITS, built_in_gait, fewest_feet_down
from hobnail.robot import Vec3

# left fore, right fore, left hind, right hind
FOUR: list[Vec3] = [(0.1, 0.05, 0.0), (0.1, -0.05, 0.0), (-0.1, 0.05, 0.0), (-0.1, -0.05, 0.0)]
# left and right from fore to hind
SIX: list[Vec3] = [(x, y, 0.0) for y in (0.05, -0.05) for x in (0.12, 0.0, -0.12)]
EIGHT: list[Vec3] = [(x, y, 0.0) for y in (0.05, -0.05) for x in (0.3, 0.1, -0.1, -0.3)]


@pytest.mark.parametrize(
    ("name", "duty", "lag"),
    [("trot", 0.6, 0.5), ("crawl", 0.8, 0.25), ("pace", 0.7, 0.0), ("amble", 0.7, 0.25)],
)
def test_hildebrand_touch_downs(name: str, duty: float, lag: float) -> None:
    """Left hind 0, left fore D, right hind 1/2, right fore 1/2 + D."""
    gait = built_in_gait(name, FOUR)
    assert gait.duty == duty
    assert gait.phases == (lag, (0.5 + lag) % 1, 0.0, 0.5)


def test_a_crawl_moves_the_body_over_its_support() -> None:
    assert built_in_gait("crawl", FOUR).body_shift == 1.0


@pytest.mark.parametrize("name", ["trot", "crawl", "pace", "amble"])
def test_any_order_of_legs_gives_the_same_gait(name: str) -> None:
    wanted = dict(zip(FOUR, built_in_gait(name, FOUR).phases, strict=True))
    for order in itertools.permutations(FOUR):
        assert dict(zip(order, built_in_gait(name, order).phases, strict=True)) == wanted


def test_tripod_lifts_no_neighbours_together() -> None:
    left, right = (
        dict(zip((2, 1, 0), built_in_gait("tripod", SIX).phases[s], strict=True))
        for s in (slice(0, 3), slice(3, 6))
    )
    for side in (left, right):
        assert side[0] == side[2] != side[1]
    assert all(left[row] != right[row] for row in range(3))
    assert set(left.values()) == {0.0, 0.5}


@pytest.mark.parametrize("hips", [SIX, EIGHT], ids=["six", "eight"])
def test_wave_runs_from_hind_to_fore_one_foot_at_a_time(hips: list[Vec3]) -> None:
    gait = built_in_gait("wave", hips)
    rows = len(hips) // 2
    left, right = list(reversed(gait.phases[:rows])), list(reversed(gait.phases[rows:]))  # from hind to fore
    assert left == sorted(left)
    assert left[0] == 0.0
    assert right == pytest.approx([phase + 0.5 for phase in left])
    assert fewest_feet_down(gait.duty, gait.phases) == len(hips) - 1
    assert gait.duty == pytest.approx(1 - 0.8 / len(hips))


def exact_fewest(duty: Fraction, phases: list[Fraction]) -> int:
    """By rational arithmetic, at the middle of each stretch between events."""
    events = sorted({phase % 1 for phase in phases} | {(phase + duty) % 1 for phase in phases})
    middles = [(a + b) / 2 % 1 for a, b in zip(events, [*events[1:], events[0] + 1], strict=True)]
    return min(sum((instant - phase) % 1 < duty for phase in phases) for instant in middles)


@pytest.mark.parametrize(
    ("duty", "lag", "fewest"),
    # Reference: (beta .75, D .25) 3 always; (.5, .5) 2 always; (.625, .25) 2 or 3; (.4, .5) 0 or 2;
    # (.6, .5) 2 or 4; (.8, .2) 3 or 4.
    [
        ("3/4", "1/4", 3),
        ("1/2", "1/2", 2),
        ("5/8", "1/4", 2),
        ("2/5", "1/2", 0),
        ("3/5", "1/2", 2),
        ("4/5", "1/5", 3),
    ],
)
def test_fewest_feet_down(duty: str, lag: str, fewest: int) -> None:
    beta, d = Fraction(duty), Fraction(lag)
    phases = [Fraction(0), d, Fraction(1, 2), (Fraction(1, 2) + d) % 1]
    assert exact_fewest(beta, phases) == fewest
    assert fewest_feet_down(float(beta), [float(phase) for phase in phases]) == fewest


def test_fewest_feet_down_agrees_with_rational_arithmetic() -> None:
    for count in (4, 6):
        for step in range(1, 12):
            phases = [Fraction(step * index * index, 24) % 1 for index in range(count)]
            for duty in (Fraction(2, 5), Fraction(1, 2), Fraction(5, 8), Fraction(3, 4), Fraction(11, 12)):
                found = fewest_feet_down(float(duty), [float(phase) for phase in phases])
                assert found == exact_fewest(duty, phases), (duty, phases)


@pytest.mark.parametrize(
    ("name", "hips", "reason"),
    [
        ("trot", SIX, "four legs"),
        ("tripod", FOUR, "six legs"),
        ("wave", FOUR, "six legs"),
        ("gallop", FOUR, "no built-in gait"),
        ("trot", [*FOUR[:3], (-0.1, 0.06, 0.0)], "as many legs"),
        ("trot", [*FOUR[:3], (-0.1, 0.0, 0.0)], "as many legs"),
    ],
)
def test_legs_that_a_gait_does_not_suit(name: str, hips: list[Vec3], reason: str) -> None:
    with pytest.raises(ValueError, match=reason):
        built_in_gait(name, hips)


def test_every_name_is_a_gait() -> None:
    for name in BUILT_IN_GAITS:
        built_in_gait(name, FOUR if name in ("trot", "crawl", "pace", "amble") else SIX)
