"""Faults: the table, the latch, clear conditions, the first cause and thinned-out lines."""

from __future__ import annotations

import pytest

from hobnail.errors import FaultError, HobnailError
from hobnail.service.faults import KINDS, Clears, Faults, Severity, Thinner, run_each
from hobnail.service.states import LATCHED, State
from machine_rig import WAYS_IN, in_state

# Design, section 6: the faults that there must be.
WANTED = {
    "commander-lost", "bus-error", "bus-stalled", "settings-lost", "tick-overrun", "joint-clamped",
    "out-of-reach", "client-flood", "recorder-behind", "supply-low", "overload", "configuration-changed",
    "stop-input",
}  # fmt: skip


def test_every_wanted_fault_is_in_the_table_with_a_next_action() -> None:
    assert set(KINDS) >= WANTED
    for name, kind in KINDS.items():
        assert kind.name == name
        assert len(kind.message) > 10
        assert len(kind.next) > 10
    assert {kind.severity for kind in KINDS.values()} == set(Severity)


@pytest.mark.parametrize("name", KINDS)
@pytest.mark.parametrize("state", WAYS_IN)
def test_each_fault_in_each_state_does_what_its_severity_says(state: str, name: str) -> None:
    rig = in_state(state)
    # Whatever happened on the way here is not the point.
    rig.machine.faults = Faults()
    before = State(state)
    rig.machine.report(name, rig.now_s, "injected", lasting=True)
    severity = KINDS[name].severity
    frame = rig.tick()
    told = {fault["name"]: fault for fault in rig.machine.faults.describe()}
    assert told[name]["next"] == KINDS[name].next
    if severity is Severity.CUT:
        assert frame.state is State.STOPPED
        assert frame.release
    elif severity is Severity.STOP:
        assert frame.state in LATCHED
        rig.until(State.STOPPED, rig.robot.safety.crouch_s + 0.05)
    elif severity is Severity.REST and before not in LATCHED:
        rig.until(State.OFF, 10.0)
        with pytest.raises(FaultError, match="battery"):
            rig.ask("stand")
    elif severity is Severity.HOLD and before is State.WALKING:
        rig.until(State.STANDING, 5.0)
        assert rig.machine.command is None
    elif severity is Severity.WARN and before is State.WALKING:
        rig.go(1.0)
        rig.expect(State.WALKING)
        assert rig.machine.command is not None


def test_walking_is_refused_while_a_hold_lasts_and_reset_clears_it() -> None:
    rig = in_state("standing")
    rig.machine.report("joint-clamped", rig.now_s)
    with pytest.raises(FaultError, match="last clamp"):
        rig.ask("walk", vx=0.1)
    rig.ask("reset")
    rig.expect(State.STANDING)
    rig.ask("walk", vx=0.1)


def test_supply_low_clears_by_itself_when_the_voltage_is_back() -> None:
    rig = in_state("standing")
    rig.machine.report("supply-low", rig.now_s, "4.9 V", lasting=True)
    rig.until(State.OFF, 10.0)
    rig.go(60.0)
    for wakes in ("stand", "rest"):
        with pytest.raises(FaultError):
            rig.ask(wakes)
    rig.machine.faults.over("supply-low", rig.now_s)
    rig.go(KINDS["supply-low"].quiet_s + 0.1)
    rig.ask("stand")
    rig.until(State.STANDING)


@pytest.mark.parametrize("name", KINDS)
def test_clear_conditions(name: str) -> None:
    faults, kind = Faults(), KINDS[name]
    faults.report(name, 0.0, lasting=True)
    faults.update(1000.0)
    assert faults.is_latched(name)
    faults.over(name, 1000.0)
    faults.update(1000.0 + kind.quiet_s - 0.1)
    assert faults.is_latched(name)
    faults.update(1000.0 + kind.quiet_s + 0.1)
    assert faults.is_latched(name) == (kind.clears is not Clears.QUIET)
    faults.commanded(2000.0)
    assert faults.is_latched(name) == (kind.clears is Clears.RESET)
    faults.reset(2000.0)
    assert not faults.is_latched(name)


def test_reset_leaves_what_lasts() -> None:
    faults = Faults()
    faults.report("stop-input", 0.0, lasting=True)
    faults.report("bus-error", 0.0)
    assert [fault.kind.name for fault in faults.reset(1.0)] == ["stop-input"]
    assert not faults.is_latched("bus-error")


def test_counts_and_the_first_cause_are_kept() -> None:
    faults = Faults()
    faults.report("bus-retried", 1.0, "errno 121")
    faults.report("bus-error", 2.0, "errno 110")
    for now_s in range(3, 10):
        faults.report("bus-stalled", float(now_s))
    assert faults.first_cause is not None
    assert "errno 110" in faults.first_cause  # a warning is no cause of a stop
    assert {fault["name"]: fault["count"] for fault in faults.describe()} == {
        "bus-retried": 1, "bus-error": 1, "bus-stalled": 7,
    }  # fmt: skip
    worst = faults.worst()
    assert worst is not None
    assert worst.kind.name == "bus-error"
    faults.reset(20.0)
    assert faults.first_cause is None
    assert faults.total("bus-stalled") == 7


def test_ten_thousand_failures_make_at_most_twenty_lines() -> None:
    faults, lines = Faults(), []
    now_s = 0.0
    for _ in range(10_000):
        now_s += 15.0  # each one is cleared before the next comes
        faults.report("bus-retried", now_s, "errno 121")
        faults.update(now_s + 12.0)
        lines += faults.drain()
    assert not faults.is_latched("bus-retried")
    assert 2 <= len(lines) <= 20
    assert lines[0].startswith("fault bus-retried")
    assert "repeated 10000 times" in "\n".join(lines)


def test_a_line_is_whole_again_after_a_long_quiet() -> None:
    thinner = Thinner(quiet_s=60.0)
    assert thinner.line("a", "text", 0.0) == "text"
    assert thinner.line("a", "text", 1.0) is None
    assert thinner.line("b", "other", 1.0) == "other"
    assert thinner.line("a", "text", 62.0) == "text"


def test_run_each_runs_all_and_returns_what_failed() -> None:
    done: list[int] = []

    def fail() -> None:
        raise OSError("no bus")

    errors = run_each((fail, lambda: done.append(1), fail, lambda: done.append(2)))
    assert done == [1, 2]
    assert [str(error) for error in errors] == ["no bus", "no bus"]


def test_fault_errors_are_of_the_tree() -> None:
    assert issubclass(FaultError, HobnailError)
