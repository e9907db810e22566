"""A clock that passes when it is told to, which threads can sleep by, and a bus to wait for; s."""

from __future__ import annotations

import math
import threading
from typing import Any

from hobnail.service.bus import Bus
from hobnail_drivers.contract import Driver

PATIENCE_S = 20.0  # real time: a bound for a broken campaign, not a time that anything takes


class Clock:
    """Monotonic seconds that pass when the world says so; other threads may sleep by it."""

    def __init__(self) -> None:
        self.now_s = 1000.0
        self.changed = threading.Condition()
        self.wakes_s: float | None = None  # when the sleeper wakes; None: nobody sleeps
        self._main = threading.get_ident()
        self._over = False

    def __call__(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        """In the world's own thread time passes; any other thread waits until it has passed."""
        if threading.get_ident() == self._main:
            self.advance_to(self.now_s + seconds)
            return
        with self.changed:
            self.wakes_s = self.now_s + seconds
            self.changed.notify_all()
            self.changed.wait_for(lambda: self._over or self.wakes_s is None or self.now_s >= self.wakes_s)
            self.wakes_s = None

    def hang(self) -> None:
        """Sleep until `let_go`."""
        self.sleep(math.inf)

    def let_go(self) -> None:
        """Wake the sleeper now."""
        with self.changed:
            self.wakes_s = None
            self.changed.notify_all()

    def end(self) -> None:
        """Nobody sleeps any more."""
        with self.changed:
            self._over = True
            self.changed.notify_all()

    def advance_to(self, time_s: float) -> None:
        """Let the time pass."""
        with self.changed:
            self.now_s = max(self.now_s, time_s)
            self.changed.notify_all()


class SteppedBus(Bus):
    """The real bus with its real thread, which the world can wait for."""

    def __init__(self, driver: Driver, clock: Clock, **settings: Any) -> None:
        super().__init__(driver, clock=clock, **settings)
        self._wanted = clock.changed  # one condition for all that may change
        self._stepped = clock

    def settle(self) -> None:
        """Wait until the thread has nothing to do, or sleeps by the clock."""

        def settled() -> bool:
            asleep = self._stepped.wakes_s is not None and self._stepped.wakes_s > self._stepped.now_s
            return asleep or (self.busy_since_s is None and not self.pending and not self._check)

        with self._wanted:
            assert self._wanted.wait_for(settled, PATIENCE_S), "the bus thread does not come to rest"
