"""sd_notify(3) against a real datagram socket: what arrives, byte for byte."""

from __future__ import annotations

import os
import socket
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest

from hobnail.service.notify import Notifier


@pytest.fixture
def manager(tmp_path: Path) -> Iterator[socket.socket]:
    """The service manager's end, on a path."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as end:
        end.bind(str(tmp_path / "notify"))
        end.settimeout(5.0)
        yield end


@pytest.fixture
def notifier(manager: socket.socket) -> Iterator[Notifier]:
    """Our end."""
    with closing(Notifier({"NOTIFY_SOCKET": manager.getsockname()})) as ours:
        yield ours


def test_the_words_of_a_life(manager: socket.socket, notifier: Notifier) -> None:
    notifier.ready("off: juniper is ready")
    notifier.status("standing")
    notifier.watchdog()
    notifier.stopping("SIGTERM")
    received = [manager.recv(4096) for _ in range(4)]
    # Source: sd_notify(3), one datagram a call, assignments parted by newlines.
    assert received == [
        b"READY=1\nSTATUS=off: juniper is ready",
        b"STATUS=standing",
        b"WATCHDOG=1",
        b"STOPPING=1\nSTATUS=SIGTERM",
    ]


def test_a_status_is_one_line_and_sent_when_it_changes(manager: socket.socket, notifier: Notifier) -> None:
    notifier.status("one\nREADY=1")
    notifier.status("one\nREADY=1")
    notifier.status("two")
    assert [manager.recv(4096) for _ in range(2)] == [b"STATUS=one READY=1", b"STATUS=two"]
    manager.setblocking(False)
    with pytest.raises(BlockingIOError):
        manager.recv(4096)


def test_abstract_socket() -> None:
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as end:
        end.bind(b"\0hobnail-test-%d" % os.getpid())
        end.settimeout(5.0)
        notifier = Notifier({"NOTIFY_SOCKET": f"@hobnail-test-{os.getpid()}"})
        notifier.watchdog()
        assert end.recv(100) == b"WATCHDOG=1"
        notifier.close()
        notifier.close()


@pytest.mark.parametrize("environ", [{}, {"NOTIFY_SOCKET": ""}, {"NOTIFY_SOCKET": "vsock:2:1"}])
def test_without_a_socket_that_we_know_nothing_is_sent(environ: dict[str, str]) -> None:
    notifier = Notifier(environ)
    notifier.ready("ready")
    notifier.watchdog()
    notifier.close()
    assert notifier.dropped == 0


def test_a_manager_that_is_gone_or_full_is_no_error(manager: socket.socket, notifier: Notifier) -> None:
    for number in range(5000):  # nobody reads
        notifier.status(f"line {number}")
    assert notifier.dropped > 0
    manager.close()
    notifier.watchdog()


# Source: sd_watchdog_enabled(3): WATCHDOG_USEC set, and WATCHDOG_PID unset or our own.
@pytest.mark.parametrize(
    ("environ", "expected"),
    [
        ({}, None),
        ({"WATCHDOG_USEC": "2000000"}, 2.0),
        ({"WATCHDOG_USEC": "2000000", "WATCHDOG_PID": "42"}, 2.0),
        ({"WATCHDOG_USEC": "2000000", "WATCHDOG_PID": "43"}, None),
        ({"WATCHDOG_USEC": "0"}, None),
        ({"WATCHDOG_USEC": "-5"}, None),
        ({"WATCHDOG_USEC": "soon"}, None),
        ({"WATCHDOG_USEC": "2000000", "WATCHDOG_PID": "me"}, None),
    ],
)
def test_watchdog_environment(environ: dict[str, str], expected: float | None) -> None:
    assert Notifier(environ, pid=42).watchdog_s == expected
