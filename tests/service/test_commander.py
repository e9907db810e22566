"""The claim to command: one at a time, lapsing with its time-to-live."""

from __future__ import annotations

import math

import pytest

from hobnail.errors import CommanderError
from hobnail.service.commander import Commander


def test_the_first_takes_it_and_keeps_it_by_asking_again() -> None:
    commander = Commander()
    assert commander.holder(0.0) is None
    commander.take(1, 0.0, 0.5)
    commander.take(1, 0.4, 0.5)
    assert commander.holder(0.89) == 1
    with pytest.raises(CommanderError, match=r"client 1 .* 0\.20 s more"):
        commander.take(2, 0.7, 0.5)
    assert commander.holder(0.9) is None
    commander.take(2, 0.9, 0.5)
    assert commander.holder(1.0) == 2


def test_a_claim_for_a_route_lasts_until_it_is_dropped() -> None:
    commander = Commander()
    commander.take(1, 0.0, math.inf)
    with pytest.raises(CommanderError, match="while its route runs"):
        commander.take(2, 1e6, 0.5)
    commander.drop(2)  # not theirs to drop
    assert commander.holder(1e6) == 1
    commander.drop(1)
    assert commander.holder(1e6) is None


def test_drop_whoever_holds_it() -> None:
    commander = Commander()
    commander.take(7, 0.0, 10.0)
    commander.drop()
    assert commander.holder(0.1) is None
