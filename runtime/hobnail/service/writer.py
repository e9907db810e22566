"""A thread for everything that may block: log lines, files, a terminal.  Its queue is bounded.

Putting something in takes microseconds and never waits; what does not fit is
dropped and counted.  The control path does nothing else with files.
"""

from __future__ import annotations

import json
import os
import pwd
import threading
import time
from collections.abc import Callable, Iterable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from queue import SimpleQueue
from typing import TYPE_CHECKING

from hobnail.service.states import LOCAL_CLIENT

if TYPE_CHECKING:
    from hobnail.service.link import Peer

LOG_NAME = "events.log"
LOG_BYTES = 5_000_000  # then it becomes events.log.1, and a new one is begun
MEMORY_BYTES = 1_000_000  # the same where the file is kept in memory
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
        self,
        writer: Writer,
        directory: Path | None,
        sinks: Iterable[Callable[[str], object]] = (),
        *,
        run: str = "",
        limit_bytes: int = LOG_BYTES,
    ) -> None:
        """`run` names this life of the service in every line; a file longer than
        `limit_bytes` becomes events.log.1."""
        self._writer = writer
        self._path = directory / LOG_NAME if directory else None
        self._sinks = tuple(sinks)
        self._run = run
        self._limit_bytes = limit_bytes
        self._told = 0

    def event(
        self,
        kind: str,
        text: str,
        now_s: float,
        *,
        client: int | None = None,
        peer: Peer | None = None,
        **details: object,
    ) -> None:
        """Something happened at `now_s` (monotonic); `client` is who asked for it, `peer` the
        process behind that; `details` are added to the line in the file."""
        wall_s = time.time()
        dropped = self._writer.dropped - self._told
        entry = {"kind": kind, "text": text, **details}
        if client is not None:
            entry["client"] = client
        if self._writer.put(lambda: self._write(entry, peer, now_s, wall_s, dropped)):
            self._told += dropped

    def _write(
        self, entry: dict[str, object], peer: Peer | None, now_s: float, wall_s: float, dropped: int
    ) -> None:
        if peer is not None:
            entry.update(pid=peer.pid, user=_user(peer.uid))
        entries = [entry]
        if dropped:
            told = f"{dropped} lines were dropped: the log could not be written fast enough"
            entries.insert(0, {"kind": "log", "text": told})
        try:
            if self._path is not None:
                self._append(self._path, entries, now_s, wall_s)
        finally:
            for each in entries:
                for sink in self._sinks:
                    sink(plain(each))

    def _append(self, path: Path, entries: list[dict[str, object]], now_s: float, wall_s: float) -> None:
        stamp = datetime.fromtimestamp(wall_s, UTC).isoformat(timespec="milliseconds")
        with path.open("a+b") as file:
            if file.seek(0, os.SEEK_END):
                file.seek(-1, os.SEEK_END)
                if file.read(1) != b"\n":  # cut by a crash or a full disk: no line may be lost with it
                    file.write(b"\n")
            for entry in entries:
                whole = {"time": stamp, "monotonic_s": round(now_s, 6), "run": self._run, **entry}
                file.write(json.dumps(whole).encode() + b"\n")
            full = file.tell() > self._limit_bytes
        if full:
            os.replace(path, path.with_name(LOG_NAME + ".1"))


def plain(entry: Mapping[str, object]) -> str:
    """An entry of the log as one line for people, without its time."""
    if "client" not in entry:
        return str(entry["text"])
    return f"{asker(entry)}: {entry['text']}"


def asker(entry: Mapping[str, object]) -> str:
    """Who asked for what an entry tells, as far as it says."""
    if entry.get("client") == LOCAL_CLIENT:
        return "the service itself"
    known = [f"user {entry['user']}"] if "user" in entry else []
    known += [f"pid {entry['pid']}"] if "pid" in entry else []
    return f"client {entry['client']}" + (f" ({', '.join(known)})" if known else "")


def _user(uid: int) -> str:
    try:
        return pwd.getpwuid(uid).pw_name
    except KeyError:
        return str(uid)
