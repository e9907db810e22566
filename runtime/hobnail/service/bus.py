"""The bus thread: the only one that calls the driver; times in s on an injected clock.

The loop hands jobs over and goes on; it never waits for a transfer.  Only
`Driver.cut`, which needs no bus, is called at once, whatever hangs.  A frame
not yet sent is replaced by a newer one, a release goes before everything, and
what happened comes back as events for the state machine.  Knows no states: it
does not decide when to stop, and it never sets boards up again by itself.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable
from functools import partial
from typing import TYPE_CHECKING, NamedTuple

from hobnail_drivers.contract import Driver, Health, Pulses
from hobnail_drivers.errors import BusError, DriverError

if TYPE_CHECKING:
    from hobnail_drivers.supply import SupplyMonitor
BUS_THREAD = "hobnail-bus"


class Event(NamedTuple):
    """Something the state machine has to know: a fault by name, and its detail."""

    fault: str
    detail: str


class Bus:
    """A driver with a thread around it.

    All methods but the thread's own return at once.  Attributes are written by
    the thread and may be read by anyone: `frames` counts the frames that reached
    the boards, `ok_s` is when the last job succeeded, `busy_since_s` when the one
    under way began (None: idle), `released` that no pulse is being sent, so far
    as is known, `is_set_up` that frames are taken, `volts` the newest reading of
    the supply.
    """

    def __init__(
        self,
        driver: Driver,
        *,
        retries: int,
        monitor: SupplyMonitor | None = None,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        """`retries`: how often a failed frame is sent again at once."""
        self.driver = driver
        self.frames = 0
        self.ok_s = clock()
        self.busy_since_s: float | None = None
        self.released = True
        self.is_set_up = False
        self.health: Health | None = None
        self.volts: float | None = None
        self.set_up_error: Exception | None = None
        self._monitor = monitor
        self._retries = retries
        self._clock = clock
        self._events: deque[Event] = deque(maxlen=1000)
        self._wanted = threading.Condition()
        self._frame: Pulses | None = None
        self._release = False
        self._set_up = False
        self._check = False
        self._close = False
        self._working = False
        self._thread = threading.Thread(target=self._run, name=BUS_THREAD, daemon=True)

    # From the loop

    def start(self) -> None:
        """Start the thread; the boards are not touched yet."""
        self._thread.start()

    def submit(self, pulses_us: Pulses) -> None:
        """Send this frame, instead of one that is still waiting."""
        with self._wanted:
            self._frame = pulses_us
            self._wanted.notify()

    def release(self) -> None:
        """End every pulse, before anything else; frames that wait are dropped."""
        with self._wanted:
            self._frame = None
            self._release = True
            self.released = False
            self._wanted.notify()

    def cut(self) -> None:
        """End every pulse at once where a line does that, even while a transfer hangs; then `release`."""
        with self._wanted:  # so that the release begins after the cut, as the driver wants it
            self.release()
            self._cut_lines()

    def set_up(self) -> None:
        """Open the driver, or set the boards up again, every output off."""
        with self._wanted:
            self._frame = None
            self.is_set_up = False
            self._set_up = True
            self._wanted.notify()

    def check(self) -> None:
        """Read the boards' settings and the supply back."""
        with self._wanted:
            self._check = True
            self._wanted.notify()

    @property
    def pending(self) -> bool:
        """The last frame, release or set-up has not been done yet."""
        return self._frame is not None or self._release or self._set_up or self._working

    def events(self) -> list[Event]:
        """What happened since the last call."""
        events = []
        while self._events:
            events.append(self._events.popleft())
        return events

    def wait(self, timeout_s: float) -> bool:
        """Wait until nothing is pending; False when that takes longer.  Not for the loop."""
        with self._wanted:
            return self._wanted.wait_for(lambda: not self.pending and not self._check, timeout_s)

    def close(self, timeout_s: float) -> bool:
        """Cut, release, close the driver and end the thread; False when a transfer hangs."""
        if not self._thread.is_alive():
            return True
        with self._wanted:
            self._frame = None
            self._close = True
            self._cut_lines()
            self._wanted.notify()
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def _cut_lines(self) -> None:
        try:
            self.driver.cut()
        except Exception as error:  # noqa: BLE001 -- the release comes all the same
            self._events.append(Event("bus-error", f"outputs could not be cut by their line: {error}"))

    # In the thread

    def _run(self) -> None:
        while True:
            with self._wanted:
                self._working = False
                self.busy_since_s = None
                self._wanted.notify_all()
                while (job := self._next()) is None:
                    self._wanted.wait()
                self._working = job != self._do_check
                self.busy_since_s = self._clock()
            job()
            if job == self._do_close:
                with self._wanted:
                    self.busy_since_s = None
                    self._wanted.notify_all()
                return

    def _next(self) -> Callable[[], None] | None:
        """The most urgent job, taken off the list."""
        if self._close:
            return self._do_close
        if self._release:
            self._release = False
            return self._do_release
        if self._set_up:
            self._set_up = False
            return self._do_set_up
        if self._frame is not None:
            frame, self._frame = self._frame, None
            return partial(self._do_write, frame)
        if self._check:
            self._check = False
            return self._do_check
        return None

    def _do_write(self, pulses_us: Pulses) -> None:
        if not self.is_set_up:
            return
        for attempt in range(self._retries + 1):
            if self._release or self._close:
                return
            try:
                self.released = False
                self.driver.write(pulses_us)
            except BusError as error:
                if attempt == self._retries:
                    self._fail("bus-error", str(error))
                else:
                    self._events.append(Event("bus-retried", str(error)))
            except Exception as error:  # noqa: BLE001 -- whatever a back end does, pulses end
                self._fail("internal", f"a frame was refused: {error!r}")
                return
            else:
                self.frames += 1
                self.ok_s = self._clock()
                return

    def _fail(self, fault: str, detail: str) -> None:
        """No more frames until the boards are set up again; pulses end now, if they can."""
        self.is_set_up = False
        self._events.append(Event(fault, detail))
        self._cut_lines()
        self._do_release()

    def _do_release(self) -> None:
        try:
            self.driver.release()
        except Exception as error:  # noqa: BLE001 -- the loop asks again until it works
            if not isinstance(error, DriverError):
                self._events.append(Event("internal", f"release: {error!r}"))
            else:
                self._events.append(Event("bus-error", f"pulses could not be cut: {error}"))
            self.is_set_up = False
        else:
            self.released = True
            self.ok_s = self._clock()

    def _do_set_up(self) -> None:
        try:
            self.driver.open()
            self.health = self.driver.health()
        except Exception as error:  # noqa: BLE001 -- told, and asked for again by `reset`
            self.set_up_error = error
            self._events.append(Event("bus-error", f"the boards could not be set up: {error}"))
        else:
            self.set_up_error = None
            self.released = self.is_set_up = True
            self.ok_s = self._clock()

    def _do_check(self) -> None:
        if self.is_set_up:
            self._check_health()
        if self._monitor is not None:
            try:
                self.volts = self._monitor.volts()
            except Exception as error:  # noqa: BLE001 -- the monitor is not worth a stop
                self.volts = None
                self._events.append(Event("supply-unread", str(error)))

    def _check_health(self) -> None:
        for attempt in range(self._retries + 1):
            try:
                self.health = self.driver.health()
            except BusError as error:
                if attempt == self._retries:
                    self._fail("bus-error", f"settings could not be read back: {error}")
                else:
                    self._events.append(Event("bus-retried", str(error)))
            except Exception as error:  # noqa: BLE001
                self._fail("internal", f"health: {error!r}")
                return
            else:
                self.ok_s = self._clock()
                if not self.health.settings_kept:
                    self._fail("settings-lost", self.health.detail)
                return

    def _do_close(self) -> None:
        for action in (self.driver.release, self.driver.close):
            try:
                action()
            except Exception as error:  # noqa: BLE001 -- the next one is tried all the same
                self._events.append(Event("bus-error", f"while closing: {error}"))
            else:
                self.released = True
