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
