"""A thread for everything that may block: log lines, files, a terminal.  Its queue is bounded.

Putting something in takes microseconds and never waits; what does not fit is
dropped and counted.  The control path does nothing else with files.
"""

from __future__ import annotations

import json
import os
import threading
import time
from collections.abc import Callable, Iterable
from datetime import UTC, datetime
from pathlib import Path
from queue import SimpleQueue

LOG_NAME = "events.log"
LOG_BYTES = 5_000_000  # then it becomes events.log.1, and a new one is begun
QUEUE_LENGTH = 500

Job = Callable[[], object]


class Writer:
    """One thread, one bounded queue of jobs; a job that fails is counted and forgotten."""

    def __init__(self, name: str, *, length: int = QUEUE_LENGTH) -> None:
        self.dropped = 0
        self.failed = 0
        self._length = length
        self._jobs: SimpleQueue[Job | None] = SimpleQueue()
        self._thread = threading.Thread(target=self._run, name=f"hobnail-{name}", daemon=True)
        self._thread.start()

    def put(self, job: Job) -> bool:
        """Have it run some time; False when the queue is full and it was dropped."""
        if self._jobs.qsize() >= self._length:
            self.dropped += 1
            return False
        self._jobs.put(job)
        return True

    def close(self, timeout_s: float, last: Job | None = None) -> bool:
        """Run what is left, and `last` however full the queue is; end the thread.  False when
        a job hangs."""
        if last is not None:
            self._jobs.put(last)
        self._jobs.put(None)
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def _run(self) -> None:
        while (job := self._jobs.get()) is not None:
            try:
                job()
            except Exception:  # noqa: BLE001 -- a full disk or a closed terminal ends no robot
                self.failed += 1


class EventLog:
    """Appends events to a file of JSON lines and to other sinks, all in a Writer's thread.

    A sink takes one line of plain text.  Lines that were dropped are told as
    soon as one goes through again.
    """

    def __init__(
        self, writer: Writer, directory: Path | None, sinks: Iterable[Callable[[str], object]] = ()
    ) -> None:
        self._writer = writer
        self._path = directory / LOG_NAME if directory else None
        self._sinks = tuple(sinks)
        self._told = 0

    def event(self, kind: str, text: str, now_s: float) -> None:
        """Something happened at `now_s` (monotonic)."""
        wall_s = time.time()
        dropped = self._writer.dropped - self._told
        if self._writer.put(lambda: self._write(kind, text, now_s, wall_s, dropped)):
            self._told += dropped

    def _write(self, kind: str, text: str, now_s: float, wall_s: float, dropped: int) -> None:
        lines = [(kind, text)]
        if dropped:
            lines.insert(
                0, ("log", f"{dropped} lines were dropped: the log could not be written fast enough")
            )
        try:
            if self._path is not None:
                self._append(lines, now_s, wall_s)
        finally:
            for _, line in lines:
                for sink in self._sinks:
                    sink(line)

    def _append(self, lines: list[tuple[str, str]], now_s: float, wall_s: float) -> None:
        assert self._path is not None
        stamp = datetime.fromtimestamp(wall_s, UTC).isoformat(timespec="milliseconds")
        with self._path.open("ab") as file:
            for kind, text in lines:
                entry = {"time": stamp, "monotonic_s": round(now_s, 6), "kind": kind, "text": text}
                file.write(json.dumps(entry).encode() + b"\n")
            full = file.tell() > LOG_BYTES
        if full:
            os.replace(self._path, self._path.with_name(LOG_NAME + ".1"))
