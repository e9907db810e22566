"""The control loop on a clock of the test's own: deadlines, stalls, watchdog, faults carried over."""

from __future__ import annotations

import errno
import json
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from threading import Event

import pytest

from hobnail.errors import FaultError
from hobnail.robot import Robot, StopInput, Supply
from hobnail.service.bus import Bus
from hobnail.service.drivers import make_driver
from hobnail.service.loop import CHECK_EVERY_S, SET_UP_LIMIT_S, Loop
from hobnail.service.machine import Machine
from hobnail.service.notify import Notifier
from hobnail.service.power import StopInputWatch, SupplyWatch
from hobnail.service.recorder import RING_NAME, Recorder, read_ring
from hobnail.service.states import State
from hobnail.service.writer import LOG_NAME, EventLog, Writer
from hobnail_drivers.contract import Health
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.simulated import SimulatedDriver
from robots import juniper

WAIT_S = 10.0  # a bound for a broken test, not a time that anything takes


class DirectBus(Bus):
    """The bus without its thread: each job is done when it is asked for, unless `holds`."""

    holds = False

    def submit(self, pulses_us: object) -> None:
        super().submit(pulses_us)  # type: ignore[arg-type]
        self._work()

    def release(self) -> None:
        super().release()
        self._work()

    def set_up(self) -> None:
        super().set_up()
        self._work()

    def check(self) -> None:
        super().check()
        self._work()

    def hang(self) -> None:
        """From now on a transfer hangs."""
        self.holds, self._working, self.busy_since_s = True, True, self._clock()

    def let_go(self) -> None:
        """The transfer comes back."""
        self.holds, self._working, self.busy_since_s = False, False, None
        self._work()

    def _work(self) -> None:
        while not self.holds and (job := self._next()) is not None:
            job()


class Stage:
    """A loop with everything around it, on a clock that only moves when somebody waits.

    `script` is (time, action) pairs, done while the socket is served; an action
    may move the clock, as something that blocks does.
    """

    def __init__(self, robot: Robot | None = None, **parts: object) -> None:
        self.robot = robot or juniper()
        self.now_s = 1000.0
        self.start_s = self.now_s
        self.plan = FaultInjector()
        driver = make_driver(SimulatedDriver, self.robot)
        assert isinstance(driver, SimulatedDriver)
        self.inner = driver
        self.bus = DirectBus(self.plan.driver(self.inner), retries=3, clock=self.clock)
        self.bus.set_up()
        self.machine = Machine(self.robot, now_s=self.now_s)
        self.script: list[tuple[float, Callable[[], object]]] = []
        self.tick_times: list[float] = []
        self.published: list[dict[str, object]] = []
        self.loop = Loop(
            self.machine,
            self.bus,
            self,
            clock=self.clock,
            sleep=self.sleep,
            after_tick=(self.tick_times.append,),
            **parts,  # type: ignore[arg-type]
        )

    def clock(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds

    def serve(self, until_s: float) -> None:
        while self.script and self.script[0][0] <= until_s:
            at_s, action = self.script.pop(0)
            self.now_s = max(self.now_s, at_s)
            action()
        self.now_s = max(self.now_s, until_s)

    def state_due(self) -> bool:
        return False

    def publish(self, params: dict[str, object]) -> None:
        self.published.append(params)

    def at(self, seconds: float, action: Callable[[], object]) -> None:
        """Have it done so long after the start."""
        self.script.append((self.start_s + seconds, action))

    def ask(self, method: str, **params: object) -> object:
        return self.machine.request(method, params, 1, self.now_s)

    def run(self, seconds: float) -> None:
        end_s = self.now_s + seconds
        self.loop.run(lambda: self.now_s >= end_s - 1e-6)

    def expect(self, state: State) -> None:
        """Assert that the machine is in that state."""
        assert self.machine.state is state, f"{self.machine.state}, wanted {state}"

    def expect_no_pulses(self) -> None:
        """Assert that the servos get no signal."""
        assert self.inner.pulses_us == (None,) * len(self.robot.joints)

    def stand(self) -> None:
        self.ask("stand")
        self.loop.run(lambda: self.machine.state is State.STANDING)

    def walk(self) -> None:
        self.stand()
        self.ask("walk", vx=0.15, ttl_s=10.0)
        self.run(1.0)


def test_ticks_keep_to_absolute_deadlines() -> None:
    stage = Stage()
    stage.run(10.0)
    period_s = stage.robot.period_s
    assert len(stage.tick_times) == 1000
    for k, at_s in enumerate(stage.tick_times, 1):
        assert at_s == pytest.approx(1000.0 + k * period_s, abs=1e-9)
    assert stage.loop.skipped == 0


def test_small_delays_do_not_add_up() -> None:
    stage = Stage()
    # Each tick itself takes 3 ms: the next one is on time all the same.
    stage.loop._after_tick = (stage.tick_times.append, lambda _: stage.sleep(0.003))
    stage.run(5.0)
    assert stage.tick_times[-1] == pytest.approx(1005.0, abs=0.011)
    assert len(stage.tick_times) == pytest.approx(500, abs=1)


def test_a_stall_of_200_ms_is_skipped_and_not_caught_up_with() -> None:
    stage = Stage()
    stage.walk()
    frames = stage.bus.frames
    stage.tick_times.clear()
    stage.at(stage.now_s - stage.start_s + 0.5, lambda: stage.sleep(0.2))
    stage.run(2.0)
    gaps = [b - a for a, b in zip(stage.tick_times, stage.tick_times[1:], strict=False)]
    assert max(gaps) == pytest.approx(0.2, abs=0.011)
    assert min(gaps) > 0.009  # no burst
    assert stage.loop.skipped == pytest.approx(20, abs=1)
    assert stage.bus.frames - frames == len(stage.tick_times)
    assert stage.machine.faults.is_latched("tick-overrun")
    stage.expect(State.WALKING)
    assert stage.loop.lateness.max_us == pytest.approx(200e3, rel=0.06)


def test_the_step_after_a_stall_is_within_the_limit() -> None:
    stage = Stage()
    stage.walk()
    steps: list[float] = []
    tick = stage.machine.tick

    def spy(now_s: float, dt_s: float, *, advance: bool = True) -> object:
        steps.append(dt_s)
        return tick(now_s, dt_s, advance=advance)

    stage.machine.tick = spy  # type: ignore[method-assign, assignment]
    stage.at(stage.now_s - stage.start_s + 0.1, lambda: stage.sleep(5.0))
    stage.run(6.0)
    assert max(steps) == pytest.approx(2 * stage.robot.period_s)


@pytest.mark.parametrize("jump_s", [86400.0, -86400.0])
def test_a_jump_of_the_wall_clock_by_a_day_changes_nothing(
    jump_s: float, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    def walked(jump: bool) -> list[float]:
        recorder = Recorder(tmp_path, juniper())
        stage = Stage(recorder=recorder)
        stage.walk()
        if jump:
            now = time.time
            monkeypatch.setattr(time, "time", lambda: now() + jump_s)
        stage.run(2.0)
        recorder.close()
        assert stage.machine.body.tick is not None
        return [*stage.machine.body.tick.pose, float(stage.loop.skipped), stage.now_s]

    assert walked(jump=False) == walked(jump=True)


def test_a_bus_that_hangs_stops_the_robot_and_not_the_loop() -> None:
    stage = Stage()
    stage.walk()
    answers: list[object] = []
    stage.bus.hang()
    for k in range(1, 10):
        stage.at(stage.now_s - stage.start_s + 0.1 * k, lambda: answers.append(stage.ask("state")))
    ticks = stage.loop.ticks
    stage.run(1.0)
    assert stage.loop.ticks - ticks == 100  # on time, all of them
    assert len(answers) == 9  # and the socket is served
    stage.expect(State.STOPPED)
    assert stage.machine.faults.is_latched("bus-stalled")
    assert any(stage.inner.pulses_us)
    stage.bus.let_go()
    stage.run(0.1)
    # The release came first; nothing was sent after it, and nothing resumes.
    stage.expect_no_pulses()
    stage.run(2.0)
    stage.expect(State.STOPPED)
    stage.expect_no_pulses()


def test_a_process_that_was_held_up_as_a_whole_does_not_blame_the_bus() -> None:
    stage = Stage()
    stage.walk()
    stage.bus.hang()
    stage.at(stage.now_s - stage.start_s + 0.05, lambda: stage.sleep(3.0))
    stage.run(3.08)
    stage.bus.let_go()
    stage.run(0.1)
    assert not stage.machine.faults.is_latched("bus-stalled")
    stage.expect(State.WALKING)


def test_a_set_up_may_take_longer_than_a_transfer_but_not_for_ever() -> None:
    stage = Stage()
    stage.bus.is_set_up = False
    stage.bus.hang()
    stage.run(SET_UP_LIMIT_S - 0.1)
    assert not stage.machine.faults.is_latched("bus-stalled")
    stage.run(0.2)
    assert stage.machine.faults.is_latched("bus-stalled")


def test_many_short_jobs_are_no_stall() -> None:
    stage = Stage()
    stage.walk()

    def busy(_: float) -> None:
        stage.bus.let_go()
        stage.bus.hang()

    stage.loop._after_tick = (busy,)
    stage.run(2.0)
    assert not stage.machine.faults.is_latched("bus-stalled")


def test_a_short_hang_moves_nothing_on_and_does_not_snap() -> None:
    stage = Stage()
    stage.walk()
    assert stage.machine.body.tick is not None
    before = stage.machine.body.tick.pose
    stage.bus.hang()
    stage.run(0.15)
    assert stage.machine.body.tick.pose == before
    stage.bus.let_go()
    stage.run(0.5)
    stage.expect(State.WALKING)
    assert stage.machine.body.tick.pose[0] > before[0]


def test_a_bus_that_takes_longer_than_a_tick_is_told_and_nothing_is_lost() -> None:
    stage = Stage()
    stage.walk()
    assert stage.loop.waited == 0
    advanced, odd = stage.bus.frames, [False]

    def every_other(_: float) -> None:
        odd[0] = not odd[0]
        (stage.bus.hang if odd[0] else stage.bus.let_go)()

    stage.loop._after_tick = (every_other,)
    stage.run(1.0)
    assert stage.loop.waited == pytest.approx(50, abs=1)
    assert stage.bus.frames - advanced == pytest.approx(50, abs=1)
    assert stage.machine.faults.is_latched("bus-behind")
    stage.expect(State.WALKING)


def test_a_tick_that_waits_now_and_then_is_no_fault() -> None:
    stage = Stage()
    stage.walk()
    stage.loop._after_tick = (
        lambda _: stage.bus.hang() if stage.loop.ticks % 50 == 0 else stage.bus.let_go(),
    )
    stage.run(20.0)
    assert stage.loop.waited >= 39
    assert stage.machine.faults.total("bus-behind") == 0


def test_a_stop_is_carried_out_at_once_and_not_at_the_next_tick() -> None:
    stage = Stage()
    stage.walk()
    stage.ask("stop", category=0)
    stage.expect_no_pulses()


@pytest.mark.parametrize("number", [errno.EREMOTEIO, errno.ETIMEDOUT])
def test_a_bus_error_that_lasts_cuts_and_needs_a_reset(number: int) -> None:
    stage = Stage()
    stage.walk()
    stage.plan.fail_next(number, count=None)
    stage.run(0.5)
    stage.expect(State.STOPPED)
    assert stage.machine.faults.is_latched("bus-error")
    assert not stage.bus.released  # it could not be told yet, and is tried again and again
    stage.plan.clear()
    stage.run(0.1)
    assert stage.bus.released
    stage.expect_no_pulses()
    stage.run(5.0)
    stage.expect(State.STOPPED)
    stage.ask("reset")
    stage.run(0.5)
    assert stage.bus.is_set_up
    stage.stand()


def test_a_wake_asked_for_with_the_reset_waits_until_the_boards_are_set_up() -> None:
    stage = Stage()
    stage.walk()
    stage.ask("stop", category=0)
    stage.run(0.1)
    stage.bus.holds = True  # the set-up takes its time
    stage.ask("reset")
    stage.ask("stand")
    stage.run(1.0)
    stage.expect(State.OFF)
    stage.bus.let_go()
    stage.run(0.1)
    stage.expect(State.WAKING)


def test_reset_sets_up_again_and_a_failing_set_up_stops_again() -> None:
    stage = Stage()
    stage.walk()
    stage.ask("stop", category=0)
    stage.plan.fail_next(errno.EREMOTEIO, count=None)
    stage.ask("reset")
    stage.ask("stand")
    stage.run(0.5)
    stage.expect(State.STOPPED)
    stage.expect_no_pulses()


def test_lost_settings_are_found_within_a_second(monkeypatch: pytest.MonkeyPatch) -> None:
    stage = Stage()
    stage.walk()
    lost_s = stage.now_s
    monkeypatch.setattr(stage.inner, "_health", lambda: Health(settings_kept=False, detail="PRE_SCALE"))
    stage.loop.run(lambda: stage.machine.state is State.STOPPED)
    assert stage.now_s - lost_s <= 1.0
    assert stage.machine.faults.is_latched("settings-lost")


def test_an_error_in_a_tick_cuts_the_pulses_and_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    stage = Stage()
    stage.walk()
    carry = stage.machine.body.carry

    def broken(_dt_s: float) -> object:
        monkeypatch.setattr(stage.machine.body, "carry", carry)
        raise ZeroDivisionError("planted")

    monkeypatch.setattr(stage.machine.body, "carry", broken)
    stage.run(0.2)
    stage.expect(State.STOPPED)
    assert stage.machine.faults.is_latched("internal")
    stage.expect_no_pulses()


def test_an_error_in_every_tick_ends_the_run(monkeypatch: pytest.MonkeyPatch) -> None:
    stage = Stage()
    stage.walk()

    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("planted")

    monkeypatch.setattr(stage.machine, "tick", broken)
    with pytest.raises(ZeroDivisionError):
        stage.run(1.0)
    stage.expect_no_pulses()


def test_an_error_of_the_socket_cuts_and_one_that_stays_ends_the_run() -> None:
    stage = Stage()
    stage.walk()

    def broken() -> None:
        raise ZeroDivisionError("planted")

    stage.at(stage.now_s - stage.start_s + 0.1, broken)
    stage.run(0.5)
    stage.expect(State.STOPPED)
    stage.expect_no_pulses()
    ticks = stage.loop.ticks
    for k in range(100):
        stage.at(stage.now_s - stage.start_s + 0.01 * k, broken)
    with pytest.raises(ZeroDivisionError):
        stage.run(1.0)
    assert stage.loop.ticks - ticks < 30


class Fed(Notifier):
    """Keeps when the watchdog was fed."""

    def __init__(self, clock: Callable[[], float]) -> None:
        super().__init__({"WATCHDOG_USEC": "2000000"})
        self.times: list[float] = []
        self._clock = clock

    def watchdog(self) -> None:
        self.times.append(self._clock())


def watched() -> tuple[Stage, Fed]:
    stage = Stage()
    fed = Fed(stage.clock)
    stage.loop._notifier = fed
    return stage, fed


def test_the_watchdog_is_fed_at_half_its_time_or_sooner_in_every_state() -> None:
    stage, fed = watched()
    stage.run(5.0)  # off
    stage.walk()
    stage.ask("stop")
    stage.run(5.0)  # stopped
    stage.expect(State.STOPPED)
    gaps = [b - a for a, b in zip(fed.times, fed.times[1:], strict=False)]
    # Source: sd_watchdog_enabled(3): every half of the time.
    assert max(gaps) <= 1.0
    assert fed.times[0] <= 1001.0
    assert stage.now_s - fed.times[-1] <= 1.0


@pytest.mark.parametrize("state", ["off", "walking", "stopped"])
def test_the_watchdog_is_not_fed_while_the_bus_hangs(state: str) -> None:
    stage, fed = watched()
    if state != "off":
        stage.walk()
    if state == "stopped":
        stage.ask("stop", category=0)
    stage.run(1.0)
    stage.bus.hang()
    hung_s = stage.now_s
    stage.run(5.0)
    limit_s = stage.robot.safety.bus_stall_s
    assert [at_s for at_s in fed.times if at_s > hung_s + limit_s + 0.02] == []
    stage.bus.let_go()
    stage.run(2.0)
    assert fed.times[-1] > stage.now_s - 1.0


def test_the_watchdog_is_not_fed_when_frames_are_taken_and_never_sent() -> None:
    """No job hangs: there is nobody to do them any more."""
    stage, fed = watched()
    stage.walk()
    stage.bus.holds = True
    ended_s = stage.now_s
    stage.run(5.0)
    limit_s = stage.robot.safety.bus_stall_s
    assert [at_s for at_s in fed.times if at_s > ended_s + limit_s + 0.02] == []


def test_garbage_is_collected_between_ticks_young_often_and_old_seldom(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    collected: list[int] = []
    monkeypatch.setattr("gc.collect", lambda generation=2: collected.append(generation))
    Stage().run(20.5)
    assert collected.count(2) == 2
    assert collected.count(0) == 18


def test_the_watchdog_is_not_fed_while_pulses_cannot_be_ended() -> None:
    stage, fed = watched()
    stage.walk()
    stage.plan.fail_next(errno.ETIMEDOUT, count=None)
    stage.run(0.2)
    failed_s = stage.now_s
    stage.run(5.0)
    assert [at_s for at_s in fed.times if at_s > failed_s] == []


def test_low_supply_leads_to_rest_then_off_and_a_dip_does_not() -> None:
    robot = replace(juniper(), supply=Supply(nominal_v=6.0, low_v=5.2))
    stage = Stage(robot, supply=SupplyWatch(robot.supply))
    stage.walk()
    stage.bus.volts = 4.0  # servos pull it down as they start
    stage.run(0.3)
    stage.bus.volts = 6.0
    stage.run(3.0)
    assert not stage.machine.faults.is_latched("supply-low")
    stage.bus.volts = 5.0
    stage.loop.run(lambda: stage.machine.state is State.OFF)
    assert stage.machine.faults.is_latched("supply-low")
    assert stage.machine.body.supply_v == pytest.approx(5.0, abs=0.2)


def test_a_supply_that_is_low_again_before_it_was_good_for_long_lets_nobody_wake() -> None:
    robot = replace(juniper(), supply=Supply(nominal_v=6.0, low_v=5.2))
    stage = Stage(robot, supply=SupplyWatch(robot.supply))
    stage.bus.volts = 4.9
    stage.run(10.0)
    stage.bus.volts = 6.0
    stage.run(4.0)
    stage.bus.volts = 4.9

    def try_to_stand() -> None:
        with pytest.raises(FaultError):
            stage.ask("stand")

    for k in range(400):
        stage.at(stage.now_s - stage.start_s + 4.0 + 0.05 * k, try_to_stand)
    stage.run(30.0)
    assert stage.script == []
    stage.expect(State.OFF)


def test_a_bus_that_hangs_again_cannot_be_reset_meanwhile() -> None:
    stage = Stage()
    stage.walk()
    for _ in range(2):
        stage.bus.hang()
        stage.run(1.0)
        with pytest.raises(FaultError, match="bus"):
            stage.ask("reset")
        stage.bus.let_go()
        stage.run(1.0)
    stage.ask("reset")


def test_the_stop_input_stops_and_a_release_moves_nothing() -> None:
    settings = StopInput(chip="gpiochip0", line=4, debounce_s=0.02)
    closed = [True]
    stage = Stage(stop_input=StopInputWatch(settings, lambda: closed[0]))
    stage.walk()
    closed[0] = False
    stage.loop.run(lambda: stage.machine.state is State.STOPPED)
    closed[0] = True
    stage.run(3.0)
    stage.expect(State.STOPPED)
    stage.ask("reset")
    stage.run(1.0)
    stage.expect(State.OFF)


def test_a_broken_stop_wire_at_start_keeps_the_robot_from_waking() -> None:
    settings = StopInput(chip="gpiochip0", line=4)

    def broken() -> bool:
        raise OSError(errno.ENODEV, "no such line")

    stage = Stage(stop_input=StopInputWatch(settings, broken))
    stage.run(0.1)
    stage.expect(State.STOPPED)
    assert "cannot be read" in json.dumps(stage.machine.snapshot(stage.now_s))


def test_a_stop_that_is_reset_before_the_next_tick_is_logged(tmp_path: Path) -> None:
    writer = Writer("test")
    stage = Stage(log=EventLog(writer, tmp_path))
    stage.machine.request("stand", {}, 1, stage.now_s)
    stage.run(0.1)
    stage.machine.request("stop", {"category": 0, "reason": "a shout"}, 1, stage.now_s)
    stage.machine.request("reset", {}, 1, stage.now_s)
    stage.run(0.1)
    assert writer.close(WAIT_S)
    log = [json.loads(line)["text"] for line in (tmp_path / LOG_NAME).read_text().splitlines()]
    assert log == ["off -> waking", "waking -> stopped: a shout (client 1)", "stopped -> off"]


def test_a_fault_is_logged_before_the_states_that_it_leads_to(tmp_path: Path) -> None:
    writer = Writer("test")
    stage = Stage(log=EventLog(writer, tmp_path))
    stage.machine.request("stand", {}, 1, stage.now_s)
    stage.run(0.1)
    stage.machine.report("settings-lost", stage.now_s, "MODE1 is 0x11")
    stage.run(0.1)
    assert writer.close(WAIT_S)
    log = [json.loads(line)["text"] for line in (tmp_path / LOG_NAME).read_text().splitlines()]
    assert log[1].startswith("fault settings-lost (cut): MODE1 is 0x11; next: ")
    assert log[2:] == ["waking -> stopped: fault settings-lost"]


def test_a_log_that_stalls_for_seconds_leaves_every_tick_on_time(tmp_path: Path) -> None:
    begun, let_go = Event(), Event()

    def stalled(_: str) -> None:
        begun.set()
        assert let_go.wait(WAIT_S)

    writer = Writer("test", length=5)
    log = EventLog(writer, tmp_path, (stalled,))
    stage = Stage(log=log)
    log.event("test", "the first line takes seven seconds", stage.now_s)
    assert begun.wait(WAIT_S)
    stage.walk()
    for number in range(100):
        log.event("test", f"line {number}", stage.now_s)
    stage.run(7.0)
    assert stage.loop.lateness.max_us < 1.0  # the clock of the test: exact
    assert stage.loop.skipped == 0
    dropped = writer.dropped
    assert dropped > 90
    let_go.set()
    log.event("test", "through again", stage.now_s)
    assert writer.close(WAIT_S)
    lines = [json.loads(line)["text"] for line in (tmp_path / LOG_NAME).read_text().splitlines()]
    told = [line for line in lines if "dropped" in line]
    assert any(str(dropped) in line for line in told) or writer.dropped > dropped


def test_every_tick_with_pulses_is_recorded(tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, juniper())
    stage = Stage(recorder=recorder)
    stage.run(1.0)
    stage.walk()
    stage.ask("stop", category=0)
    stage.run(1.0)
    recorder.close()
    rows = read_ring(tmp_path / RING_NAME).rows
    assert rows[0].state is State.WAKING
    assert rows[-1].state is State.WALKING
    assert rows[-1].command == pytest.approx((0.15, 0.0, 0.0))
    assert len(rows) == stage.bus.frames


def test_timing_is_published() -> None:
    stage = Stage()
    stage.run(1.0)
    told = stage.machine.snapshot(stage.now_s)["timing"]
    assert told == {
        "period_s": 0.01, "ticks": 100, "skipped": 0, "waited": 0,
        "lateness_us": {"p50": 0.0, "p99": 0.0, "p999": 0.0, "max": 0.0},
        "lateness_histogram_us": [(1.0, 100)],
    }  # fmt: skip


def test_read_back_is_asked_for_often_enough() -> None:
    assert 2 * CHECK_EVERY_S < 1.0
