"""The histogram of lateness against numpy's percentiles."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.service.timing import PER_OCTAVE, Lateness


@given(st.lists(st.floats(2.0, 1e6), min_size=1, max_size=500))
def test_percentiles_are_at_most_a_bucket_too_high(late_us: list[float]) -> None:
    lateness = Lateness()
    for value in late_us:
        lateness.add(value * 1e-6)
    for name, share in (("p50", 0.5), ("p99", 0.99), ("p999", 0.999)):
        # The judge: numpy, the smallest value that so many are not above.
        exact = float(np.percentile(late_us, 100 * share, method="inverted_cdf"))
        assert exact * 0.999 - 0.1 <= lateness.describe()[name] <= exact * 2 ** (1 / PER_OCTAVE) * 1.001 + 0.1
    assert lateness.max_us == pytest.approx(max(late_us))


@given(st.lists(st.floats(0.0, 1e6), max_size=200))
def test_the_histogram_counts_each_value_under_the_edge_above_it(late_us: list[float]) -> None:
    lateness = Lateness()
    for value in late_us:
        lateness.add(value * 1e-6)
    edges_us = [0.0] + [2.0**power for power in range(25)]
    # The judge: numpy's, whose bins have their lower edge, and ours the upper one.
    counts, _ = np.histogram([-value for value in late_us], bins=[-edge for edge in reversed(edges_us)])
    wanted = {edge: count for edge, count in zip(edges_us[1:], reversed(counts), strict=True) if count}
    got = dict(lateness.histogram())
    assert sum(got.values()) == len(late_us)
    # A value within rounding of an edge may be on either side.
    near = sum(any(abs(value - edge) < 1e-6 * edge for edge in edges_us) for value in late_us)
    assert sum(abs(got.get(edge, 0) - wanted.get(edge, 0)) for edge in edges_us) <= 2 * near


def test_the_histogram_has_all_that_is_later_in_its_last_place() -> None:
    lateness = Lateness()
    for late_s in (-1.0, 1.5e-6, 3e-6, 3.5e-6, 7200.0):
        lateness.add(late_s)
    assert lateness.histogram() == [(1.0, 1), (2.0, 1), (4.0, 2), (2.0**24, 1)]


def test_early_and_on_time_count_as_zero() -> None:
    lateness = Lateness()
    for late_s in (-1.0, 0.0, 1e-7):
        lateness.add(late_s)
    assert lateness.count == 3
    assert lateness.describe()["p999"] <= 1.0


def test_nothing_measured_is_zero() -> None:
    assert Lateness().describe() == {"p50": 0.0, "p99": 0.0, "p999": 0.0, "max": 0.0}


def test_hours_late_is_counted() -> None:
    lateness = Lateness()
    lateness.add(7200.0)
    assert lateness.describe()["max"] == pytest.approx(7.2e9)
