"""A record as the service leaves it: real machine, recorder, chronicle and log, on an injected clock.

No loop and no socket; requests come from made-up clients.
"""

from __future__ import annotations

from contextlib import AbstractContextManager
from pathlib import Path
from unittest.mock import patch

from hobnail.errors import HobnailError
from hobnail.service.archive import keep_recording
from hobnail.service.chronicle import Chronicle
from hobnail.service.link import Peer
from hobnail.service.recorder import RING_NAME, Recorder
from hobnail.service.states import State
from hobnail.service.writer import EventLog, Job, Writer
from machine_rig import Rig
from robots import juniper

BEGAN_WALL_S = 1_800_000_000.0  # 2027-01-15T08:00:00Z


class AtOnce(Writer):
    """A writer that does what it is given there and then."""

    def __init__(self) -> None:
        self.dropped = 0

    def put(self, job: Job) -> bool:
        job()
        return True


class Life:
    """One run of the service; its files are in `directory`.  `wall_s` is what the wall clock shows."""

    def __init__(self, directory: Path, run: str = "first", began_s: float = 100.0) -> None:
        self.directory = directory
        self.offset_s = BEGAN_WALL_S - 100.0
        self.rig = Rig(juniper())
        self.rig.now_s = began_s
        with self._clock():
            self.recorder = Recorder(directory, juniper(), run, directory)
        self.log = EventLog(AtOnce(), directory, run=run)
        self.chronicle = Chronicle(self._asked, ttl_s=juniper().safety.command_ttl_s)
        self.lateness_s = 0.0
        self.event("start", "juniper: driver simulated, socket hobnail.sock")

    @property
    def wall_s(self) -> float:
        return self.rig.now_s + self.offset_s

    def event(self, kind: str, text: str) -> None:
        with self._clock():
            self.log.event(kind, text, self.rig.now_s)

    def ask(self, method: str, client: int = 1, **params: object) -> None:
        """A request; one that is refused is in the log, and that is all."""
        try:
            self.rig.ask(method, client, **params)
        except HobnailError as error:
            self.chronicle.refused(method, error, client, self.rig.now_s)
        else:
            self.chronicle.taken(method, params, client, self.rig.now_s)

    def go(self, seconds: float) -> None:
        machine = self.rig.machine
        for _ in range(round(seconds / juniper().period_s)):
            frame = self.rig.tick()
            now_s = self.rig.now_s
            if not frame.release:
                self.recorder.row(
                    frame, now_s, 0.01, self.lateness_s, machine.command, 6.0, machine.faults.names()
                )
            self.lateness_s = 0.0
            for line in machine.faults.drain():
                self.event("fault", line)
            for before, after, reason in machine.passages:
                self.event("state", f"{before} -> {after}{reason and f': {reason}'}")

    def stand(self) -> None:
        self.ask("stand")
        while self.rig.state is not State.STANDING:
            self.go(0.1)

    def walk(self, seconds: float, client: int = 1) -> None:
        for _ in range(round(seconds / 0.1)):
            self.ask("walk", client, vx=0.1, vy=0.0, yaw_rate=0.0)
            self.go(0.1)

    def end(self) -> None:
        """In good order."""
        self.ask("off")
        while self.rig.state is not State.OFF:
            self.go(0.1)
        self.event("end", "SIGTERM")
        self.recorder.close()

    def keep(self) -> Path:
        """Keep a recording, as a stop does."""
        kept = keep_recording(self.directory / RING_NAME, self.directory, "stop", self.wall_s)
        assert kept is not None
        return kept

    def _asked(self, text: str, now_s: float, client: int) -> None:
        with self._clock():
            self.log.event("command", text, now_s, client=client, peer=Peer(1000 + client, 0, 0))

    def _clock(self) -> AbstractContextManager[object]:
        return patch("time.time", return_value=self.wall_s)
