"""One client's socket: what is read from it, written to it and waited for; bytes and monotonic seconds.

Lines and credit are `connection`'s; whose turn it is and what a request does is `server`'s.
"""

from __future__ import annotations

import select
import socket
import struct
from typing import NamedTuple

from hobnail.service.connection import CHUNK, Connection, Limits
from hobnail.service.protocol import Exchange, service_error

MAX_OUTPUT = 65536  # bytes a write


class Peer(NamedTuple):
    """The process at the other end, as the kernel knows it."""

    pid: int
    uid: int
    gid: int


class Link(Connection):
    """A connection with its socket, which must be non-blocking."""

    def __init__(self, sock: socket.socket, client_id: int, limits: Limits, now_s: float) -> None:
        super().__init__(limits, now_s)
        self.socket = sock
        self.client_id = client_id
        self.peer = Peer(*struct.unpack("3i", sock.getsockopt(socket.SOL_SOCKET, socket.SO_PEERCRED, 12)))
        self.exchange: Exchange | None = None  # the line being answered
        self.doom = ""  # why it is to be dropped
        self.told_flood = False
        self.spare_until_s: float | None = None  # not None: beyond the limit of clients
        self._readable = False
        self._blocked = False  # the kernel takes no more output
        self._interest = 0  # what epoll watches for
        self._watch_period_s: float | None = None
        self._next_state_s = 0.0

    # --- input and output ---------------------------------------------------------------------

    def note(self, events: int) -> None:
        """Take note of what epoll reports."""
        if events & ~select.EPOLLIN:
            self._blocked = False
        if self._interest & select.EPOLLIN:
            self._readable = True

    def receive(self) -> None:
        """One read, where there is something to read."""
        if not self._readable:
            return
        self._readable = False
        try:
            self.feed(self.socket.recv(CHUNK))
        except BlockingIOError:
            return
        except OSError:  # the other end is gone; what it sent before still counts
            self.feed(b"")

    def queue(self, text: bytes) -> None:
        """Append a line to the output; a client with too much of it is doomed."""
        # One line may always be queued: whoever reads gets it, however long it is.
        if self.outbox and len(self.outbox) + len(text) >= self.limits.max_queue:
            self.doom = f"more than {self.limits.max_queue} bytes were not read"
        else:
            self.outbox += text + b"\n"

    def send(self) -> None:
        """One write, where there is something to write and the kernel takes it."""
        if not self.outbox or self._blocked:
            return
        try:
            sent = self.socket.send(self.outbox[:MAX_OUTPUT])
        except BlockingIOError:
            self._blocked = True
        except OSError:  # it will never read; but what it has sent is still to be carried out
            self.outbox.clear()
        else:
            del self.outbox[:sent]

    def say_goodbye(self, next_step: str) -> None:
        """Tell the client why it is dropped, if it reads."""
        self.outbox += service_error(self.doom, next_step) + b"\n"
        self.send()

    def set_interest(self, poll: select.epoll) -> None:
        """Have epoll watch for what can be made use of, and nothing else."""
        wanted = select.EPOLLIN if self.has_room() else 0
        if self.outbox and self._blocked:
            wanted |= select.EPOLLOUT
        if wanted == self._interest:
            return
        if not wanted:  # not only masked: a hang-up is reported for everything registered
            poll.unregister(self.socket)
        elif not self._interest:
            poll.register(self.socket, wanted)
        else:
            poll.modify(self.socket, wanted)
        self._interest = wanted

    def close(self, poll: select.epoll) -> None:
        """Close the socket."""
        if self._interest:
            poll.unregister(self.socket)
            self._interest = 0
        self.socket.close()

    # --- what is to be done ---------------------------------------------------------------------

    def is_done(self) -> bool:
        """True when all is read, carried out and answered."""
        return self.ended and not self.outbox and self.exchange is None and not self.has_line()

    def is_due(self, now_s: float) -> bool:
        """True when a turn would get something done."""
        return (
            self._readable
            or self.exchange is not None
            or (bool(self.outbox) and not self._blocked)
            or self.is_ready(now_s)
            or bool(self.doom)
            or self.is_done()
            or (self.is_flooding and (not self.told_flood or self.floods_too_long(now_s)))
            or (self.spare_until_s is not None and now_s >= self.spare_until_s)
        )

    def wakes_s(self, now_s: float) -> float:
        """How long until it becomes due without an event; s."""
        wakes_s = self.waits_s(now_s) if self.has_line() else 3600.0
        if self.spare_until_s is not None:
            wakes_s = min(wakes_s, self.spare_until_s - now_s)
        return max(0.0, wakes_s)

    # --- watching -------------------------------------------------------------------------------

    def watch(self, rate_hz: float, now_s: float) -> None:
        """Let states be owed so often, the first at once; 0 ends it."""
        self._watch_period_s = 1.0 / rate_hz if rate_hz > 0.0 else None
        self._next_state_s = now_s

    def state_owed(self, now_s: float) -> bool:
        """True when it is time for a state."""
        # A little early will do, so that one state a tick is not thinned out by uneven ticks.
        period_s = self._watch_period_s
        return period_s is not None and now_s >= self._next_state_s - period_s / 4.0

    def state_given(self, now_s: float) -> None:
        """Set the time for the next state."""
        assert self._watch_period_s is not None
        # On a fixed grid, so that the mean rate is right; but no burst after a pause.
        self._next_state_s += self._watch_period_s
        if self._next_state_s < now_s:
            self._next_state_s = now_s + self._watch_period_s
