"""Words to the service manager: sd_notify(3) by hand, one datagram each; times in s.

Never blocks once the service is ready: a datagram that does not go out at once
is dropped and counted.  Without NOTIFY_SOCKET every call does nothing.
"""

from __future__ import annotations

import os
import socket
from collections.abc import Mapping

READY_TIMEOUT_S = 2.0


class Notifier:
    """The service manager's notification socket, as the environment names it.

    `watchdog_s` is the longest time between two `watchdog` calls that the
    manager accepts, None when it does not watch this process.
    """

    def __init__(self, environ: Mapping[str, str] | None = None, pid: int | None = None) -> None:
        environ = os.environ if environ is None else environ
        self.watchdog_s = _watchdog_s(environ, os.getpid() if pid is None else pid)
        self.dropped = 0
        self._status = ""
        self._socket: socket.socket | None = None
        self._address = _address(environ.get("NOTIFY_SOCKET", ""))
        if self._address:
            self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC)
            self._socket.setblocking(False)

    def ready(self, status: str) -> None:
        """The service is up: the socket is open and the driver set up."""
        if self._socket is not None:
            # This one must not be lost, and nothing moves yet: here it may wait.
            self._socket.settimeout(READY_TIMEOUT_S)
            self._send(f"READY=1\nSTATUS={_line(status)}")
            self._socket.setblocking(False)

    def status(self, text: str) -> None:
        """One line for `systemctl status`; sent when it changed."""
        if text != self._status:
            self._status = text
            self._send(f"STATUS={_line(text)}")

    def watchdog(self) -> None:
        """Still alive."""
        self._send("WATCHDOG=1")

    def stopping(self, status: str) -> None:
        """Going down."""
        self._send(f"STOPPING=1\nSTATUS={_line(status)}")

    def close(self) -> None:
        """Let go of the socket; may be called twice."""
        if self._socket is not None:
            self._socket.close()
            self._socket = None

    def _send(self, text: str) -> None:
        if self._socket is None:
            return
        try:
            self._socket.sendto(text.encode(), self._address)
        except OSError:  # full, or the manager is gone: nothing to be done about either
            self.dropped += 1


def _address(name: str) -> bytes:
    """The socket address; empty when there is none of a kind that we know."""
    if name.startswith("@"):
        return b"\0" + os.fsencode(name[1:])
    return os.fsencode(name) if name.startswith("/") else b""


def _watchdog_s(environ: Mapping[str, str], pid: int) -> float | None:
    """sd_watchdog_enabled(3): WATCHDOG_USEC counts when WATCHDOG_PID is unset or our own."""
    try:
        microseconds = int(environ.get("WATCHDOG_USEC", ""))
        meant = int(environ.get("WATCHDOG_PID", pid))
    except ValueError:
        return None
    return microseconds / 1e6 if microseconds > 0 and meant == pid else None


def _line(text: str) -> str:
    return text.replace("\n", " ")
