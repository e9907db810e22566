"""What is asked of the system for punctual ticks, and what is told when it refuses."""

from __future__ import annotations

import errno
import gc
import os
import sys

import pytest

from hobnail.service.bus import BUS_THREAD
from hobnail.service.realtime import FIFO_PRIORITY, go_realtime, quiet_collector, usual_collector
from hobnail.service.writer import Writer


class Libc:
    """Stands in for the C library."""

    def __init__(self, result: int) -> None:
        self.result = result
        self.flags: list[int] = []

    def mlockall(self, flags: int) -> int:
        self.flags.append(flags)
        return self.result


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch) -> dict[int, tuple[int, int]]:
    """Scheduling asked for: thread -> (policy, priority)."""
    wanted: dict[int, tuple[int, int]] = {}

    def schedule(thread_id: int, policy: int, param: os.sched_param) -> None:
        wanted[thread_id] = (policy, param.sched_priority)

    monkeypatch.setattr(os, "sched_setscheduler", schedule)
    return wanted


def libc(monkeypatch: pytest.MonkeyPatch, result: int) -> Libc:
    fake = Libc(result)
    monkeypatch.setattr("ctypes.CDLL", lambda *_, **__: fake)
    return fake


def test_every_thread_takes_part_and_the_slow_ones_come_after(
    asked: dict[int, tuple[int, int]], monkeypatch: pytest.MonkeyPatch
) -> None:
    libc(monkeypatch, 0)
    slow, bus = Writer("writer"), Writer("x")
    bus._thread.name = BUS_THREAD
    told = go_realtime()
    policy = os.SCHED_FIFO | os.SCHED_RESET_ON_FORK
    assert asked[slow._thread.native_id or 0] == (policy, FIFO_PRIORITY - 1)
    assert asked[bus._thread.native_id or 0] == (policy, FIFO_PRIORITY)
    assert asked[os.getpid()] == (policy, FIFO_PRIORITY)
    assert "on, SCHED_FIFO" in told[0]
    assert "locked" in told[1]
    for writer in (slow, bus):
        assert writer.close(10.0)


def test_what_is_refused_is_told_with_what_allows_it(monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise PermissionError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(os, "sched_setscheduler", refuse)
    libc(monkeypatch, -1)
    scheduling, memory = go_realtime()
    assert "off, Operation not permitted; LimitRTPRIO" in scheduling
    assert "not locked" in memory
    assert "LimitMEMLOCK" in memory


@pytest.mark.usefixtures("asked")
def test_future_memory_is_locked_only_where_locking_is_unlimited(monkeypatch: pytest.MonkeyPatch) -> None:
    # mlockall(2): MCL_CURRENT is 1, MCL_FUTURE 2, MCL_ONFAULT 4.
    for limit, flags in ((-1, 7), (8 << 20, 5)):
        fake = libc(monkeypatch, 0)
        monkeypatch.setattr("resource.getrlimit", lambda _, limit=limit: (limit, limit))
        go_realtime()
        assert fake.flags == [flags]


def test_the_collector_is_quiet_and_as_usual_again() -> None:
    interval_s = sys.getswitchinterval()
    try:
        quiet_collector()
        assert not gc.isenabled()
        assert gc.get_freeze_count() > 0
        assert sys.getswitchinterval() < interval_s
    finally:
        usual_collector()
    assert gc.isenabled()
    assert gc.get_freeze_count() == 0
    assert sys.getswitchinterval() == pytest.approx(interval_s)
