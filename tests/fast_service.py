"""The real machine and the real socket in a thread, on simulated time that runs as fast as it goes.

No bus and no driver: what the commands see of a running robot is here, the
servos are not.
"""

from __future__ import annotations

import threading
import time
from pathlib import Path
from types import TracebackType
from typing import Self

from hobnail.service.machine import Machine
from hobnail.service.server import SocketServer
from hobnail.service.timing import Lateness
from robots import juniper

BITE_S = 0.0002  # real time for the socket after each tick of simulated time


class FastService:
    """`clock` and `sleep` go by the simulated time, for the commands under test."""

    def __init__(self, directory: Path) -> None:
        self.path = directory / "hobnail.sock"
        self.robot = juniper()
        self.machine = Machine(self.robot, now_s=0.0)
        self.machine.instruments["timing"] = self._timing
        self.machine.instruments["driver"] = lambda: {"name": "none", "simulated": True, "frame_hz": {}}
        self.machine.instruments["supply_v"] = lambda: 6.0
        self.now_s = 0.0
        self.ticks = 0
        self._late = Lateness()
        self._ends = threading.Event()
        self._thread = threading.Thread(target=self._run)
        self._server = SocketServer(
            self.path,
            lambda method, params, client: self.machine.request(method, params, client, self.now_s),
            on_gone=lambda client: self.machine.client_gone(client, self.now_s),
        )

    def clock(self) -> float:
        """Simulated time, s."""
        return self.now_s

    def sleep(self, duration_s: float) -> None:
        """Until the simulated time has gone on so far."""
        until_s = self.now_s + duration_s
        while self.now_s < until_s and not self._ends.is_set():
            time.sleep(0)

    def _timing(self) -> dict[str, object]:
        period_s = self.robot.period_s
        return {"period_s": period_s, "ticks": self.ticks, "skipped": 0, "lateness_us": self._late.describe()}

    def _run(self) -> None:
        while not self._ends.is_set():
            self._server.serve(time.monotonic() + BITE_S)
            self.now_s += self.robot.period_s
            self.machine.tick(self.now_s, self.robot.period_s)
            self.ticks += 1
            if self._server.state_due():
                self._server.publish(self.machine.snapshot(self.now_s))

    def __enter__(self) -> Self:
        self._server.open()
        self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._ends.set()
        self._thread.join()
        self._server.close()
