"""A socket server on a clock that only moves when it is told or waited for, and raw clients; for tests only.

Everything happens in one thread: clients write and read without blocking, the
server runs for a given time of the false clock in between.
"""

from __future__ import annotations

import contextlib
import json
import select
import socket
from collections.abc import Iterator
from pathlib import Path

from hobnail.service.protocol import Params
from hobnail.service.server import SocketServer

PERIOD_S = 0.01


class FalseClock:
    """Monotonic seconds; every reading costs a microsecond, waiting costs what it says."""

    def __init__(self) -> None:
        self.now_s = 1000.0
        self.waits_s: list[float] = []

    def __call__(self) -> float:
        self.now_s += 1e-6
        return self.now_s

    def wait(self, poll: select.epoll, timeout_s: float) -> None:
        assert timeout_s >= 0.0
        self.waits_s.append(timeout_s)
        if not select.select([poll], [], [], 0.0)[0]:
            self.now_s += timeout_s


class RawClient:
    """A client that sends what it is told to and collects what comes back."""

    def __init__(self, path: Path) -> None:
        self.socket = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        self.socket.setblocking(False)
        self.socket.connect(str(path))
        self.inbox = b""
        self.is_closed = False  # by the server

    def send(self, data: bytes) -> int:
        """As much of it as the kernel takes; -1 when the server has closed."""
        sent = 0
        try:
            while sent < len(data):
                sent += self.socket.send(data[sent : sent + 65536])
        except BlockingIOError:
            return sent
        except (BrokenPipeError, ConnectionResetError):
            self.is_closed = True
            return -1
        return sent

    def ask(self, method: str, request_id: int | None = None, **params: object) -> None:
        self.send(request(method, request_id, **params))

    def receive(self) -> None:
        try:
            while chunk := self.socket.recv(65536):
                self.inbox += chunk
            self.is_closed = True
        except BlockingIOError:
            return
        except ConnectionResetError:
            self.is_closed = True

    def answers(self) -> list[dict[str, object]]:
        """What has come since the last call, line by line."""
        self.receive()
        *lines, self.inbox = self.inbox.split(b"\n")
        return [json.loads(line) for line in lines]

    def close(self) -> None:
        self.socket.close()


def request(method: str, request_id: int | None = None, **params: object) -> bytes:
    """One line."""
    text: dict[str, object] = {"jsonrpc": "2.0", "method": method, "params": params}
    if request_id is not None:
        text["id"] = request_id
    return json.dumps(text).encode() + b"\n"


class Bench:
    """The server, its owner and the clients."""

    def __init__(self, path: Path, **settings: object) -> None:
        self.clock = FalseClock()
        self.calls: list[tuple[str, Params, int]] = []
        self.events: list[tuple[str, int]] = []
        self.gone: list[int] = []
        self.errors: list[tuple[str, BaseException]] = []
        self.call_s = 0.0  # what a call takes
        self.clients: list[RawClient] = []
        self.server = SocketServer(
            path,
            self.handle,
            clock=self.clock,
            wait=self.clock.wait,
            on_event=lambda name, client_id: self.events.append((name, client_id)),
            on_gone=self.gone.append,
            on_error=lambda where, error: self.errors.append((where, error)),
            **settings,  # type: ignore[arg-type]
        )
        self.server.open()

    def handle(self, method: str, params: Params, client_id: int) -> object:
        self.clock.now_s += self.call_s
        self.calls.append((method, params, client_id))
        return {"method": method, "params": params}

    def client(self) -> RawClient:
        client = RawClient(self.server.path)
        self.clients.append(client)
        return client

    def run(self, seconds: float = PERIOD_S) -> None:
        """The loop's idle time, period by period, with nothing else in it."""
        until_s = self.clock.now_s + seconds
        while self.clock.now_s < until_s:
            deadline_s = min(until_s, self.clock.now_s + PERIOD_S)
            self.server.serve(deadline_s)
            # What is left to the loop, which sleeps on an absolute time.
            self.clock.now_s = max(self.clock.now_s, deadline_s)

    def close(self) -> None:
        for client in self.clients:
            client.close()
        self.server.close()


@contextlib.contextmanager
def bench(path: Path, **settings: object) -> Iterator[Bench]:
    """A bench that is closed at the end."""
    made = Bench(path, **settings)
    try:
        yield made
    finally:
        made.close()
