"""The control loop: one tick at each absolute deadline t0 + k T of a monotonic clock; times in s.

The socket is served between ticks and never later than the next one.  Ticks
that were missed are skipped, not caught up with.  Nothing here waits for a
bus, a file or a client; the clock is injected.
"""

from __future__ import annotations

import gc
import time
from collections.abc import Callable, Sequence
from typing import Protocol

from hobnail.service.bus import Bus
from hobnail.service.machine import Machine
from hobnail.service.notify import Notifier
from hobnail.service.power import StopInputWatch, SupplyWatch
from hobnail.service.recorder import Recorder
from hobnail.service.states import Frame
from hobnail.service.timing import Lateness
from hobnail.service.writer import EventLog

SPARE_S = 0.0005  # before the deadline, the socket is left and the exact sleep begins
LONGEST_STEP = 2  # periods that one tick may stand for
CHECK_EVERY_S = 0.4  # read-back of settings and supply: a brown-out shows within a second
SET_UP_LIMIT_S = 5.0  # a set-up may take longer than a transfer before it counts as stalled
# Garbage collections, in idle time; what was there at the start is frozen, so that a full
# one takes a tenth of a millisecond.
YOUNG_EVERY_S, OLD_EVERY_S = 1.0, 10.0
BEHIND = 5.0  # so many ticks more than one in ten had to wait for the bus: that is told
ERRORS_AT_ONCE = 10.0  # so many errors, each tick without one taking half of one back, end the service


class Server(Protocol):
    """What the loop needs of the socket server."""

    def serve(self, until_s: float) -> None:
        """Handle what comes in; back at `until_s` at the latest."""

    def state_due(self) -> bool:
        """A watcher waits for a state."""

    def publish(self, params: dict[str, object]) -> None:
        """Send a state to the watchers."""


class Loop:
    """Calls the machine on time and carries its frames to the bus.

    `lateness`, `ticks`, `skipped` and `waited` (ticks in which the last frame was
    still on its way, so that nothing moved) are what `state` publishes as timing.
    """

    def __init__(
        self,
        machine: Machine,
        bus: Bus,
        server: Server,
        *,
        clock: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], object] = time.sleep,
        recorder: Recorder | None = None,
        log: EventLog | None = None,
        notifier: Notifier | None = None,
        supply: SupplyWatch | None = None,
        stop_input: StopInputWatch | None = None,
        before_tick: Callable[[float], object] | None = None,
        after_tick: Sequence[Callable[[float], object]] = (),
    ) -> None:
        """`before_tick` and each of `after_tick` are called with the time once a tick; they must be short."""
        self.machine = machine
        self.bus = bus
        self.lateness = Lateness()
        self.ticks = 0
        self.skipped = 0
        self.waited = 0
        self._behind = 0.0
        self._job_since_s: float | None = None
        self._job_s = 0.0
        self._server = server
        self._clock = clock
        self._sleep = sleep
        self._recorder = recorder
        self._log = log
        self._notifier = notifier
        self._supply = supply
        self._stop_input = stop_input
        self._before_tick = before_tick
        self._after_tick = after_tick
        self._period_s = machine.robot.period_s
        self._setups = machine.setups
        self._state = machine.state
        self._errors = 0.0
        self._checked_s = self._young_s = self._old_s = clock()
        self._fed_s = -1e9
        machine.on_cut = bus.cut
        machine.instruments["timing"] = self.timing

    def timing(self) -> dict[str, object]:
        """Period, ticks done, skipped and waited, and the lateness of those done (see `Lateness`)."""
        return {
            "period_s": self._period_s,
            "ticks": self.ticks,
            "skipped": self.skipped,
            "waited": self.waited,
            "lateness_us": self.lateness.describe(),
            "lateness_histogram_us": self.lateness.histogram(),
        }

    def run(self, finished: Callable[[], bool]) -> None:
        """Tick until `finished` says so, asked once after each tick."""
        period_s, clock = self._period_s, self._clock
        start_s = clock()
        k = 1
        while True:
            deadline_s = start_s + k * period_s
            try:
                self._server.serve(deadline_s - SPARE_S)
            except Exception as error:  # noqa: BLE001 -- told, and counted: see below
                self._failed(error, clock())
            left_s = deadline_s - clock()
            if left_s > 0.0:
                self._sleep(left_s)
            now_s = clock()
            late_s = now_s - deadline_s
            skipped = int(late_s / period_s) if late_s > 0.0 else 0
            self.lateness.add(late_s)
            self.tick(now_s, late_s, skipped)
            if finished():
                return
            k += 1 + skipped

    def tick(self, now_s: float, late_s: float = 0.0, skipped: int = 0) -> None:
        """One tick, guarded: an error in it cuts the pulses and is told."""
        machine = self.machine
        try:
            if skipped:
                self.skipped += skipped
                machine.report("tick-overrun", now_s, f"{late_s * 1e3:.1f} ms late, {skipped} ticks skipped")
            dt_s = min(1 + skipped, LONGEST_STEP) * self._period_s
            frame = self._carry(now_s, dt_s)
            self._keep(frame, now_s, dt_s, late_s)
            self._housekeep(frame, now_s)
            self._errors = max(0.0, self._errors - 0.5)
        except Exception as error:  # noqa: BLE001 -- told, and counted: see below
            self._failed(error, now_s)
        self.ticks += 1

    def _failed(self, error: Exception, now_s: float) -> None:
        """An error of our own: cut the pulses and tell; raise it when there are too many."""
        self.bus.cut()
        self._errors += 1.0
        if self._errors >= ERRORS_AT_ONCE:
            raise error
        self.machine.report("internal", now_s, repr(error))
        if self._log is not None and self._errors <= 1.0:
            import traceback  # seldom needed

            self._log.event("error", "".join(traceback.format_exception(error)), now_s)

    def _carry(self, now_s: float, dt_s: float) -> Frame:
        """Faults in, frame out."""
        machine, bus = self.machine, self.bus
        for event in bus.events():
            machine.report(event.fault, now_s, event.detail)
        self._judge_bus(now_s, dt_s)
        self._watch_inputs(now_s)
        if self._before_tick is not None:
            self._before_tick(now_s)
        ready = bus.is_set_up and machine.setups == self._setups  # else a reset has asked for a set-up
        machine.wake_blocked = "" if ready else "the boards are being set up"
        pending = bus.pending
        frame = machine.tick(now_s, dt_s, advance=not pending)
        if frame.setup != self._setups:
            self._setups = frame.setup
            bus.set_up()
        if frame.release:
            if not bus.released and not pending:
                bus.release()
        elif not pending:
            bus.submit(frame.pulses_us)
            self._behind = max(0.0, self._behind - 0.1)
        else:
            self._wait(now_s)
        return frame

    def _wait(self, now_s: float) -> None:
        self.waited += 1
        self._behind += 1.0
        if self._behind > BEHIND:
            self._behind = 0.0
            self.machine.report("bus-behind", now_s, f"{self.waited} ticks so far")

    def _judge_bus(self, now_s: float, dt_s: float) -> None:
        """Stalled: one job has been under way for too long, in the loop's own time.  Where the
        whole process was held up, the bus is not to blame."""
        machine, since_s = self.machine, self.bus.busy_since_s
        if since_s is None or since_s != self._job_since_s:
            self._job_since_s, self._job_s = since_s, 0.0
        else:
            self._job_s += dt_s
        limit_s = machine.robot.safety.bus_stall_s if self.bus.is_set_up else SET_UP_LIMIT_S
        machine.watch("bus-stalled", self._job_s >= limit_s, now_s, f"for {self._job_s:.2f} s so far")

    def _watch_inputs(self, now_s: float) -> None:
        machine, contact, supply = self.machine, self._stop_input, self._supply
        if contact is not None:
            contact.update(now_s)
            machine.watch("stop-input", contact.is_open, now_s, contact.detail)
        if supply is not None and supply.update(self.bus.volts, now_s):
            machine.body.supply_v = supply.volts
            machine.watch("supply-low", supply.is_low, now_s, supply.detail)

    def _keep(self, frame: Frame, now_s: float, dt_s: float, late_s: float) -> None:
        machine = self.machine
        if self._recorder is not None and not frame.release:
            self._recorder.row(
                frame, now_s, dt_s, late_s, machine.command, machine.body.supply_v, machine.faults.names()
            )
        if self._log is None:
            return
        for line in machine.faults.drain():  # before the states that they lead to
            self._log.event("fault", line, now_s)
        for before, after, reason in machine.passages:
            self._log.event("state", f"{before} -> {after}{reason and f': {reason}'}", now_s)

    def _housekeep(self, frame: Frame, now_s: float) -> None:
        if frame.state is not self._state:
            self._state = frame.state
            if self._notifier is not None:
                self._notifier.status(f"{frame.state}: {summary(self.machine)}")
        if self._server.state_due():
            self._server.publish(self.machine.snapshot(now_s))
        if now_s - self._checked_s >= CHECK_EVERY_S:
            self._checked_s = now_s
            self.bus.check()
        self._feed(frame, now_s)
        for call in self._after_tick:
            call(now_s)
        if now_s - self._old_s >= OLD_EVERY_S:
            self._old_s = self._young_s = now_s
            gc.collect()
        elif now_s - self._young_s >= YOUNG_EVERY_S:
            self._young_s = now_s
            gc.collect(0)

    def _feed(self, frame: Frame, now_s: float) -> None:
        """Feed the watchdog for a finished tick, if what it wanted has reached the boards."""
        notifier = self._notifier
        if notifier is None or notifier.watchdog_s is None or now_s - self._fed_s < notifier.watchdog_s / 4:
            return
        if self.reaches_boards(frame, now_s):
            self._fed_s = now_s
            notifier.watchdog()

    def reaches_boards(self, frame: Frame, now_s: float) -> bool:
        """The boards do what the frame says, so far as the bus thread knows."""
        stall_s = self.machine.robot.safety.bus_stall_s
        if self._job_s >= stall_s:
            return False
        if frame.release:
            return self.bus.released
        return now_s - self.bus.ok_s <= stall_s


def summary(machine: Machine) -> str:
    """One line about the robot, for the service manager."""
    fault = machine.faults.worst()
    if machine.stop_record is not None:
        return f"stopped: {machine.stop_record.reason}"
    return fault.kind.message if fault else "no faults"
