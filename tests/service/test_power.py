"""Filters of the supply's voltage and of the stop contact, on times given."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.robot import StopInput, Supply
from hobnail.service.power import RECOVERED, SMOOTH_S, StopInputWatch, SupplyWatch

SUPPLY = Supply(nominal_v=6.0, low_v=5.2)


def feed(watch: SupplyWatch, volts: float, seconds: float, from_s: float) -> float:
    for k in range(round(seconds / 0.01)):
        watch.update(volts, from_s + 0.01 * k)
    return from_s + seconds


def test_the_filter_is_of_first_order() -> None:
    watch = SupplyWatch(SUPPLY)
    watch.update(6.0, 0.0)
    watch.update(5.0, SMOOTH_S)
    # Common practice: after one time constant, 1 - 1/e of the step.
    assert watch.volts == pytest.approx(6.0 - (1.0 - math.exp(-1.0)))


def test_low_for_a_while_is_low_and_a_dip_is_not() -> None:
    watch = SupplyWatch(SUPPLY)
    now_s = feed(watch, 6.0, 1.0, 0.0)
    now_s = feed(watch, 4.5, 0.3, now_s)
    assert not watch.is_low
    now_s = feed(watch, 6.0, 5.0, now_s)
    now_s = feed(watch, 5.0, 10.0, now_s)
    assert watch.is_low
    assert "5.0" in watch.detail
    assert "5.20 V" in watch.detail


def test_it_is_good_again_only_well_above_the_limit() -> None:
    watch = SupplyWatch(SUPPLY)
    now_s = feed(watch, 5.0, 20.0, 0.0)
    now_s = feed(watch, 5.25, 20.0, now_s)
    assert watch.is_low
    feed(watch, 5.2 * RECOVERED + 0.05, 20.0, now_s)
    assert not watch.is_low


@pytest.mark.parametrize("reading", [None, float("nan"), float("inf"), 0.0, -1.0])
def test_no_voltage_is_no_reading(reading: float | None) -> None:
    watch = SupplyWatch(SUPPLY)
    assert not watch.update(reading, 1.0)
    assert watch.volts == 6.0


def test_without_a_limit_nothing_is_low() -> None:
    watch = SupplyWatch(Supply(nominal_v=6.0))
    feed(watch, 1.0, 60.0, 0.0)
    assert not watch.is_low


CONTACT = StopInput(chip="gpiochip0", line=4, debounce_s=0.03)


class Contact:
    def __init__(self) -> None:
        self.closed = True
        self.error: OSError | None = None

    def __call__(self) -> bool:
        if self.error is not None:
            raise self.error
        return self.closed


def test_open_for_the_debounce_time_is_open() -> None:
    contact = Contact()
    watch = StopInputWatch(CONTACT, contact)
    watch.update(0.0)
    contact.closed = False
    watch.update(1.00)
    watch.update(1.02)
    assert not watch.is_open
    watch.update(1.03)
    assert watch.is_open
    contact.closed = True
    watch.update(1.04)
    assert watch.is_open
    watch.update(1.08)
    assert not watch.is_open


@given(st.lists(st.booleans(), max_size=200))
def test_bouncing_shorter_than_the_debounce_time_changes_nothing(bounces: list[bool]) -> None:
    contact = Contact()
    watch = StopInputWatch(CONTACT, contact)
    now_s = 0.0
    for closed in bounces:
        now_s += 0.01
        contact.closed = closed
        watch.update(now_s)
        contact.closed = True  # between two readings that differ there is always one that is closed
        now_s += 0.01
        watch.update(now_s)
        assert not watch.is_open


def test_a_contact_that_cannot_be_read_is_open() -> None:
    contact = Contact()
    watch = StopInputWatch(CONTACT, contact)
    contact.error = OSError("broken wire")
    watch.update(0.0)
    watch.update(0.05)
    assert watch.is_open
    assert "broken wire" in watch.detail
    assert "line 4" in watch.detail
