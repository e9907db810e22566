"""Slow errands for the running service, each done in the writer's thread: files are looked at and kept.

Watches the configuration on disk (told, not acted upon), keeps posture and
recordings when the pulses end, and tells when the log cannot follow.
"""

from __future__ import annotations

import os
import time
from pathlib import Path

from hobnail.robot import Robot
from hobnail.service.archive import keep_recording, save_posture
from hobnail.service.machine import Machine
from hobnail.service.recorder import PREVIOUS_NAME, RING_NAME
from hobnail.service.states import NO_PULSES, State
from hobnail.service.writer import Writer

LOOK_EVERY_S = 5.0

Signature = tuple[tuple[int, int, int] | None, ...]


class Keeper:
    """Called once a tick by the loop; does nothing itself that could block."""

    def __init__(
        self, machine: Machine, writer: Writer, sources: tuple[Path, ...], runtime: Path, archive: Path | None
    ) -> None:
        """`sources` are the files that the robot was read from, `runtime` is where the ring
        is, `archive` a directory on a disk, None when nothing is to be kept over a reboot."""
        self._machine = machine
        self._writer = writer
        self._sources = sources
        self._runtime = runtime
        self._archive = archive
        self._seen = self._found = signature(sources)
        self._looked_s = machine.started_s
        self._dropped = 0

    def keep_previous(self) -> None:
        """The ring before this one was interrupted: keep it."""
        self._keep(PREVIOUS_NAME, "interrupted")

    def update(self, now_s: float) -> None:
        """Once a tick."""
        machine, writer = self._machine, self._writer
        for before, after, _ in machine.passages:
            if after in NO_PULSES and before not in NO_PULSES:
                self._keep_posture(machine.robot)
            if after is State.STOPPED and before is not State.OFF:
                self._keep(RING_NAME, "stop")
        if writer.dropped > self._dropped:
            machine.report("recorder-behind", now_s, f"{writer.dropped} dropped so far")
            self._dropped = writer.dropped
        if now_s - self._looked_s >= LOOK_EVERY_S:
            self._looked_s = now_s
            writer.put(self._look)
        machine.watch("configuration-changed", self._found != self._seen, now_s)

    def _look(self) -> None:
        self._found = signature(self._sources)

    def _keep_posture(self, robot: Robot) -> None:
        joints, archive = self._machine.body.last_rad, self._archive
        if archive is not None and joints is not None:
            self._writer.put(lambda: save_posture(archive, robot, joints))

    def _keep(self, ring: str, name: str) -> None:
        archive = self._archive
        if archive is not None:
            self._writer.put(lambda: keep_recording(self._runtime / ring, archive, name, time.time()))


def signature(paths: tuple[Path, ...]) -> Signature:
    """What changes when one of the files is written; None for one that is not there."""
    found: list[tuple[int, int, int] | None] = []
    for path in paths:
        try:
            status = os.stat(path)
        except OSError:
            found.append(None)
        else:
            found.append((status.st_ino, status.st_size, status.st_mtime_ns))
    return tuple(found)
