"""How late the ticks are: a histogram of microseconds on log-spaced buckets, cheap enough for every tick.

Reads no clock.
"""

from __future__ import annotations

import math

PER_OCTAVE = 16  # buckets to a factor of two: a percentile is at most 4.5 % too high
OCTAVES = 24  # up to 16 s


class Lateness:
    """Counts of lateness since the start."""

    def __init__(self) -> None:
        self.count = 0
        self.max_us = 0.0
        self._buckets = [0] * (PER_OCTAVE * OCTAVES)

    def add(self, late_s: float) -> None:
        """One tick's lateness; early counts as zero."""
        late_us = late_s * 1e6
        self.count += 1
        if late_us > self.max_us:
            self.max_us = late_us
        index = int(PER_OCTAVE * math.log2(late_us)) + 1 if late_us > 1.0 else 0
        self._buckets[min(index, len(self._buckets) - 1)] += 1

    def percentile_us(self, share: float) -> float:
        """The upper edge of the bucket that the `share` smallest values reach into."""
        wanted, seen = share * self.count, 0
        for index, count in enumerate(self._buckets):
            seen += count
            if count and seen >= wanted:
                return min(math.exp2(index / PER_OCTAVE), self.max_us)
        return 0.0

    def histogram(self) -> list[tuple[float, int]]:
        """(upper edge in us, count) of each factor of two that has any; the last one has all above it."""
        buckets = self._buckets
        counts = [(1.0, buckets[0])]
        counts += [
            (2.0 ** (octave + 1), sum(buckets[1 + octave * PER_OCTAVE : 1 + (octave + 1) * PER_OCTAVE]))
            for octave in range(OCTAVES)
        ]
        return [(edge_us, count) for edge_us, count in counts if count]

    def describe(self) -> dict[str, float]:
        """p50, p99, p99.9 and the greatest, us."""
        told = {name: self.percentile_us(share) for name, share in _SHARES.items()}
        told["max"] = self.max_us
        return {name: round(value, 1) for name, value in told.items()}


_SHARES = {"p50": 0.5, "p99": 0.99, "p999": 0.999}
