"""The local socket, served in the idle time of the control loop: no thread, no waiting beyond a deadline.

Times are seconds of the given monotonic clock.  What the requests do is the
handler's business; JSON-RPC is `protocol`'s, lines and credit `connection`'s.

Work is cut into bites, each one turn of one client: at most one read, one call
and one write.  Clients take turns, so that a stop waits for one round at most.
"""

from __future__ import annotations

import contextlib
import errno
import select
import socket
import time
from collections import deque
from collections.abc import Callable, Mapping
from pathlib import Path
from types import TracebackType
from typing import Self

from hobnail.errors import ServiceError
from hobnail.service import socket_file
from hobnail.service.connection import Limits
from hobnail.service.link import Link, Peer
from hobnail.service.protocol import (
    ErrorSink,
    Exchange,
    Handler,
    Params,
    Protocol,
    bad_line,
    log_error,
    notification,
)

EARLY_S = 0.0003  # `serve` ends so much before its time: waiting here is no more precise than that
SPARE_PLACES = 4  # clients beyond the limit that are heard, in case they want to stop the robot
SPARE_S = 0.25  # and for how long
ACCEPT_AGAIN_S = 0.1  # pause when there are no file descriptors left

_NO_ROOM = (errno.EMFILE, errno.ENFILE, errno.ENOBUFS, errno.ENOMEM)


def _wait(poll: select.epoll, timeout_s: float) -> None:
    # epoll itself counts in ms, rounded up; select on it has the resolution of the clock.
    select.select([poll], [], [], timeout_s)


class SocketServer:
    """Serves one Unix stream socket from within the control loop.

    `on_event(name, client_id)` hears of `flood`, `dropped`, `refused` and
    `garbage`; `on_gone(client_id)` of every client that has left; `on_error` of
    what should not happen.  Neither they nor the handler may block.
    The request `watch` is answered here; all others reach the handler, with
    checked parameters by name.
    """

    def __init__(
        self,
        path: Path,
        handler: Handler,
        *,
        clock: Callable[[], float] = time.monotonic,
        max_clients: int = 16,
        max_line: int = 65536,
        max_queue: int = 262144,
        group: str | None = None,
        on_event: Callable[[str, int], None] | None = None,
        on_gone: Callable[[int], None] | None = None,
        on_error: ErrorSink = log_error,
        wait: Callable[[select.epoll, float], None] = _wait,
    ) -> None:
        """`max_line` and `max_queue` in bytes a client; `wait` is for tests."""
        self.path = path
        self._handler = handler
        self._clock = clock
        self._max_clients = max_clients
        self._limits = Limits(max_line=max_line, max_queue=max_queue)
        self._group = group
        self._on_event = on_event
        self._on_gone = on_gone
        self._on_error = on_error
        self._wait = wait
        self._protocol = Protocol(self._call, on_error=self._report)
        self._listener: socket.socket | None = None
        self._identity = (0, 0)
        self._poll: select.epoll | None = None
        self._links: dict[int, Link] = {}
        self._by_fd: dict[int, Link] = {}
        self._ring: deque[Link | None] = deque([None])  # None: the turn of the listening socket
        self._last_id = 0
        self._knock = False  # somebody wants to connect
        self._accept_again_s: float | None = None
        self._told_no_room = False
        self._bite_s = 0.0  # the longest bite of late

    # --- life ---------------------------------------------------------------------------------

    def open(self) -> None:
        """Listen; ServiceError when that cannot be."""
        self._listener = socket_file.listen(self.path, group=self._group)
        self._identity = socket_file.identity(self.path)
        self._poll = select.epoll()
        self._poll.register(self._listener, select.EPOLLIN)

    def close(self) -> None:
        """Close every connection and remove the socket; `on_gone` is not called.  May be called
        twice, or without `open`."""
        for link in self._links.values():
            link.socket.close()
        self._links.clear()
        self._by_fd.clear()
        self._ring = deque([None])
        if self._listener is not None:
            self._listener.close()
            self._listener = None
            socket_file.remove(self.path, self._identity)
        if self._poll is not None:
            self._poll.close()
            self._poll = None

    def __enter__(self) -> Self:
        self.open()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # --- what the owner may ask and send ----------------------------------------------------------

    @property
    def clients(self) -> tuple[int, ...]:
        """Who is connected, oldest first."""
        return tuple(self._links)

    @property
    def buffered_bytes(self) -> int:
        """What is kept for all clients together, unread requests and unsent answers."""
        return sum(len(link.inbox) + len(link.outbox) for link in self._links.values())

    def peer(self, client_id: int) -> Peer | None:
        """The process behind a client; None when it has left."""
        link = self._links.get(client_id)
        return link.peer if link else None

    def watch(self, client_id: int, rate_hz: float = 10.0) -> None:
        """Have `publish` send to a client, at most so often; 0 ends it."""
        link = self._links.get(client_id)
        if link is not None:
            link.watch(rate_hz, self._clock())

    def unwatch(self, client_id: int) -> None:
        """No more states to this client."""
        self.watch(client_id, 0.0)

    def state_due(self) -> bool:
        """True when a watcher waits for a state: only then need the owner make one."""
        if not self._links:
            return False
        now_s = self._clock()
        return any(link.state_owed(now_s) for link in self._links.values())

    def publish(self, params: Mapping[str, object]) -> None:
        """Queue a `state` notification for every watcher whose turn it is; never raises."""
        now_s = self._clock()
        owed = [link for link in self._links.values() if link.state_owed(now_s)]
        if not owed:
            return
        try:
            text = notification("state", params)
        except (TypeError, ValueError, RecursionError) as error:
            self._report("publish", error)
            return
        for link in owed:
            link.state_given(now_s)
            link.queue(text)

    # --- serving --------------------------------------------------------------------------------

    def serve(self, until_s: float) -> None:
        """Serve the clients, waiting for them where there is nothing to do, until shortly before
        `until_s`; a bite is not begun when it may not end by then.

        The first bite is taken however late it is, so that a loop that is always
        late still hears a stop.
        """
        if self._poll is None:
            raise ServiceError("the socket is not open: call `open` first")
        now_s = self._clock()
        # One slow bite, or one interruption in it, must not keep the clients waiting for long.
        longest_guard_s = max(0.0, until_s - now_s) / 4.0
        hungry = True
        while True:
            self._note_events(self._poll)
            idle = True
            for _ in range(len(self._ring)):
                link = self._ring[0]
                if self._is_due(link, now_s):
                    guard_s = max(EARLY_S, min(self._bite_s, longest_guard_s))
                    if not hungry and until_s - now_s < guard_s:
                        return
                    hungry = idle = False
                    self._ring.rotate(-1)
                    now_s = self._bite(self._poll, link, now_s)
                else:
                    self._ring.rotate(-1)
            if idle:
                left_s = until_s - EARLY_S - now_s
                if left_s <= 0.0:
                    return
                self._wait(self._poll, min(left_s, self._wakes_s(now_s)))
                now_s = self._clock()

    def _note_events(self, poll: select.epoll) -> None:
        for fd, events in poll.poll(0):
            link = self._by_fd.get(fd)
            if link is None:
                self._knock = True
            else:
                link.note(events)

    def _is_due(self, link: Link | None, now_s: float) -> bool:
        if link is not None:
            return link.is_due(now_s)
        return self._knock or (self._accept_again_s is not None and now_s >= self._accept_again_s)

    def _wakes_s(self, now_s: float) -> float:
        """How long until something becomes due without an event."""
        wakes_s = [link.wakes_s(now_s) for link in self._links.values()]
        if self._accept_again_s is not None:
            wakes_s.append(max(0.0, self._accept_again_s - now_s))
        return min(wakes_s, default=3600.0)

    def _bite(self, poll: select.epoll, link: Link | None, began_s: float) -> float:
        if link is None:
            self._accept(poll, began_s)
        else:
            self._turn(poll, link, began_s)
        now_s = self._clock()
        took_s = now_s - began_s
        self._bite_s = max(took_s, self._bite_s + (took_s - self._bite_s) / 64.0)
        return now_s

    def _turn(self, poll: select.epoll, link: Link, now_s: float) -> None:
        link.receive()
        if link.exchange is None and link.is_ready(now_s):
            self._begin(link)
        if link.exchange is not None:
            self._step(link, link.exchange)
        self._judge(link, now_s)
        if link.doom:
            self._drop(poll, link)
            return
        link.send()
        if link.is_done():
            self._remove(poll, link)
        else:
            link.set_interest(poll)

    def _begin(self, link: Link) -> None:
        line = link.take_line()
        if line is None:
            self._tell("garbage", link.client_id)
            link.queue(bad_line(f"a line of more than {link.limits.max_line} bytes"))
        elif line.strip(b" \t\r"):  # blank lines are none (NDJSON)
            if self._places_left() > 0:
                link.spare_until_s = None
            link.exchange = Exchange(self._protocol, line, link.client_id)
            link.spend(max(0.0, link.exchange.calls - 1.0))
            if link.exchange.garbage:
                self._tell("garbage", link.client_id)

    def _step(self, link: Link, exchange: Exchange) -> None:
        if not exchange.step():
            return
        link.exchange = None
        if exchange.answer is not None:
            link.queue(exchange.answer)
        if link.spare_until_s is not None:  # it was heard once
            link.end()

    def _judge(self, link: Link, now_s: float) -> None:
        """Find out whether the client is to be dropped."""
        if link.is_flooding and not link.told_flood:
            self._tell("flood", link.client_id)
        link.told_flood = link.is_flooding
        if link.floods_too_long(now_s):
            link.doom = f"more than {link.limits.rate_hz:g} requests a second"
        if link.discarded > link.limits.max_discard:
            link.doom = f"a line of more than {link.limits.max_discard} bytes"
        if link.spare_until_s is not None and now_s >= link.spare_until_s:
            link.doom = self._full()

    # --- clients come and go ------------------------------------------------------------------------

    def _places_left(self) -> int:
        return self._max_clients - sum(link.spare_until_s is None for link in self._links.values())

    def _full(self) -> str:
        return f"all {self._max_clients} places for clients are taken; only `stop` is heard"

    def _accept(self, poll: select.epoll, now_s: float) -> None:
        assert self._listener is not None
        self._knock = False
        if self._accept_again_s is not None:
            self._accept_again_s = None
            poll.modify(self._listener, select.EPOLLIN)
        try:
            sock, _ = self._listener.accept()
        except OSError as error:
            if error.errno in _NO_ROOM:
                self._accept_again_s = now_s + ACCEPT_AGAIN_S
                poll.modify(self._listener, 0)
                if not self._told_no_room:
                    self._told_no_room = True
                    self._report("accept", error)
            return
        self._told_no_room = False
        sock.setblocking(False)
        self._last_id += 1
        link = Link(sock, self._last_id, self._limits, now_s)
        if self._places_left() <= 0:
            link.spare_until_s = now_s + SPARE_S
        self._links[link.client_id] = link
        self._by_fd[sock.fileno()] = link
        self._ring.append(link)
        link.set_interest(poll)
        spare = [link for link in self._links.values() if link.spare_until_s is not None]
        if len(spare) > SPARE_PLACES:
            spare[0].doom = self._full()
            self._drop(poll, spare[0])

    def _drop(self, poll: select.epoll, link: Link) -> None:
        if link.spare_until_s is not None:
            link.say_goodbye("try again later")
            self._tell("refused", link.client_id)
        else:
            link.say_goodbye("send less, and read the answers")
            self._tell("dropped", link.client_id)
        self._remove(poll, link)

    def _remove(self, poll: select.epoll, link: Link) -> None:
        del self._by_fd[link.socket.fileno()]
        del self._links[link.client_id]
        self._ring.remove(link)
        link.close(poll)
        if self._on_gone is not None:
            try:
                self._on_gone(link.client_id)
            except Exception as error:  # noqa: BLE001 the others are still to be served
                self._report("on_gone", error)

    # --- calls out ----------------------------------------------------------------------------------

    def _call(self, method: str, params: Params, client_id: int) -> object:
        if self._links[client_id].spare_until_s is not None and method != "stop":
            self._tell("refused", client_id)
            raise ServiceError(f"{self._full()}: close another client, or try again later")
        if method == "watch" and isinstance(params, dict):
            rate_hz = params["rate_hz"]
            assert isinstance(rate_hz, float)
            self.watch(client_id, rate_hz)
            return {"rate_hz": rate_hz}
        return self._handler(method, params, client_id)

    def _tell(self, event: str, client_id: int) -> None:
        if self._on_event is not None:
            try:
                self._on_event(event, client_id)
            except Exception as error:  # noqa: BLE001 the others are still to be served
                self._report("on_event", error)

    def _report(self, where: str, error: BaseException) -> None:
        with contextlib.suppress(Exception):  # nobody is left to be told
            self._on_error(where, error)
