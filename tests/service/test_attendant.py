"""The end of a run and the display, seen from the loop, on an injected clock; signals given by hand."""

from __future__ import annotations

import signal
from collections.abc import Callable
from threading import Event

import pytest

from hobnail.service.bus import Bus
from hobnail.service.drivers import make_driver
from hobnail.service.serve import POWER_DOWN_S, SHOW_EVERY_S, Attendant
from hobnail.service.states import State
from hobnail_drivers.simulated import SimulatedDriver
from machine_rig import Rig, in_state
from robots import juniper

WAIT_S = 10.0  # a bound for a broken test, not a time that anything takes


def attend(rig: Rig, show: Callable[[dict[str, object]], object] | None = None) -> Attendant:
    """An attendant whose bus is never used: only its `released` is looked at."""
    return Attendant(rig.machine, Bus(make_driver(SimulatedDriver, juniper()), retries=0), None, show)


def go(rig: Rig, attendant: Attendant, seconds: float, *, advance: bool = True) -> None:
    """Tick until the attendant says that it is finished, for so long at most."""
    for _ in range(round(seconds / 0.01)):
        attendant.before_tick(rig.now_s)
        rig.tick(advance=advance)
        attendant.after_tick(rig.now_s)
        if attendant.finished():
            return


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_to_end_ends_at_rest(number: signal.Signals) -> None:
    rig = in_state("walking")
    attendant = attend(rig)
    attendant._signals.append(number)
    go(rig, attendant, 10.0)
    assert attendant.finished()
    assert rig.states[-2:] == [State.RESTING, State.OFF]
    assert rig.machine.closing == number.name


def test_not_finished_until_asked() -> None:
    rig = in_state("off")
    attendant = attend(rig)
    go(rig, attendant, 1.0)
    assert not attendant.finished()


def test_not_finished_before_the_pulses_have_ended() -> None:
    rig = in_state("walking")
    attendant = attend(rig)
    attendant._bus.released = False
    attendant._signals.append(signal.SIGTERM)
    go(rig, attendant, 10.0)
    rig.expect(State.OFF)
    assert not attendant.finished()
    attendant._bus.released = True
    assert attendant.finished()


def test_a_board_that_cannot_be_reached_does_not_keep_the_service_for_ever() -> None:
    rig = in_state("walking")
    attendant = attend(rig)
    attendant._bus.released = False
    attendant._signals.append(signal.SIGTERM)
    go(rig, attendant, POWER_DOWN_S + 1.0)
    assert attendant.finished()


def test_lying_down_that_never_ends_is_cut() -> None:
    rig = in_state("walking")
    attendant = attend(rig)
    attendant._signals.append(signal.SIGTERM)
    go(rig, attendant, POWER_DOWN_S + 1.0, advance=False)
    rig.expect(State.STOPPED)
    assert attendant.finished()
    assert rig.machine.stop_record is not None
    assert "lying down took longer" in rig.machine.stop_record.reason


def test_the_display_is_fed_ten_times_a_second_and_may_stand_still() -> None:
    let_go, begun = Event(), Event()
    shown: list[object] = []

    def terminal(told: dict[str, object]) -> None:
        shown.append(told["state"])
        begun.set()
        assert let_go.wait(WAIT_S)

    rig = in_state("standing")
    attendant = attend(rig, terminal)
    attendant.after_tick(rig.now_s)
    assert begun.wait(WAIT_S)
    go(rig, attendant, 100 * SHOW_EVERY_S)  # the terminal stands still all the while
    assert shown == ["standing"]
    rig.ask("stop", category=0)
    let_go.set()
    attendant.close()
    assert shown[-1] == "stopped"  # the last is always shown
    assert len(shown) <= 3
