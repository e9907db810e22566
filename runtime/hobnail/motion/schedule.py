"""When which foot is down: duty factor and relative phases over one cycle; no lengths.

Phases and times are shares of the cycle.  A leg of phase p touches down at p,
stands for the duty factor and swings for the rest (Hildebrand, Science
150:701, 1965).
"""

from __future__ import annotations

from collections.abc import Sequence

# Share of a cycle over which a foot takes up and gives off its load: the time in
# which both of two alternating sets of feet are down, within these bounds.
LOAD_RAMP = (0.05, 0.1)


def load_ramp(duty: float) -> float:
    """Share of the cycle over which a foot takes up its load, and gives it off."""
    return max(min(duty - 0.5, LOAD_RAMP[1]), LOAD_RAMP[0])


def leg_phase(clock: float, phase: float) -> float:
    """Share of the cycle since the leg's touch-down, 0 <= p < 1."""
    return (clock - phase) % 1.0


def feet_down(duty: float, phases: Sequence[float], clock: float) -> tuple[bool, ...]:
    """Which feet stand at this time of the cycle, leg by leg."""
    return tuple(leg_phase(clock, phase) < duty for phase in phases)


def events(duty: float, phases: Sequence[float]) -> list[float]:
    """Times of all touch-downs and lift-offs in a cycle, ascending, without doubles."""
    return sorted({round(p % 1.0, 12) % 1.0 for phase in phases for p in (phase, phase + duty)})


def intervals(duty: float, phases: Sequence[float]) -> list[tuple[float, float, tuple[bool, ...]]]:
    """The cycle cut at its events: (start, length, feet down between), summing to 1."""
    cuts = events(duty, phases)
    pieces = []
    for start, end in zip(cuts, [*cuts[1:], cuts[0] + 1.0], strict=True):
        pieces.append((start, end - start, feet_down(duty, phases, 0.5 * (start + end))))
    return pieces


def shares_by_feet_down(duty: float, phases: Sequence[float]) -> dict[int, float]:
    """Share of the cycle in which each number of feet is down."""
    shares: dict[int, float] = {}
    for _, length, down in intervals(duty, phases):
        shares[sum(down)] = shares.get(sum(down), 0.0) + length
    return shares
