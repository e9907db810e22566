"""What a `walk` line costs in the protocol and over the socket, beside bare json on the same line; us.

    python tests/benchmarks/protocol_bench.py [ROUNDS]

Prints medians of one run and their ratio to json.loads + json.dumps of the same
line and answer.  The worst lines that a client can send are listed as well:
they bound how long one turn of a client may take.
"""

from __future__ import annotations

import json
import socket
import statistics
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

from hobnail.service.protocol import MAX_VALUES, Params, Protocol
from hobnail.service.server import SocketServer

_BATCHES = 40

WALK = b'{"jsonrpc": "2.0", "method": "walk", "params": {"vx": 0.12, "vy": 0.0, "yaw_rate": -0.3}, "id": 234}'
ANSWER = {"jsonrpc": "2.0", "result": {"state": "walking", "holder": 3}, "id": 234}

WORST = {
    "64 KB of one string": b'"' + b"x" * 65_000 + b'"',
    "64 KB of quotes, unfinished": b"[" * 20 + b'"' + b'\\"' * 32_000,
    "64 KB of escapes": b'"' + b"\\u00e9" * 10_000 + b'"',
    "64 KB of digits": b"[" + b"1." + b"1" * 65_000 + b"]",
    "as many objects as allowed": b"[" + b",".join([b"{}"] * (MAX_VALUES // 2 - 1)) + b"]",
    "as many members as allowed": b"{" + b",".join(b'"%d":1' % i for i in range(MAX_VALUES - 2)) + b"}",
    "deep nesting": b"[" * 60_000,
    "16 states in a batch": b"[" + b",".join([b'{"jsonrpc":"2.0","method":"state","id":1}'] * 16) + b"]",
}


def _handle(_method: str, _params: Params, _client_id: int) -> object:
    return ANSWER["result"]


def _median_us(call: Callable[[], object], rounds: int) -> float:
    times = []
    for _ in range(_BATCHES):
        began_s = time.perf_counter()
        for _ in range(rounds):
            call()
        times.append((time.perf_counter() - began_s) / rounds)
    return 1e6 * statistics.median(times)


def _over_the_socket_us(rounds: int) -> float:
    """One request and its answer: written, served, read, all in this thread; the client's
    two system calls are in it."""
    with tempfile.TemporaryDirectory() as directory:
        path = Path(directory) / "h.sock"
        now_s = 0.0

        def clock() -> float:
            nonlocal now_s
            now_s += 0.01  # a false clock that runs fast, so that credit never ends
            return now_s

        with SocketServer(path, _handle, clock=clock) as server, socket.socket(socket.AF_UNIX) as client:
            client.settimeout(5.0)
            client.connect(str(path))
            server.serve(0.0)

            def ask() -> None:
                client.send(WALK + b"\n")
                server.serve(0.0)
                assert client.recv(65536)

            return _median_us(ask, rounds)


def main() -> None:
    """Print the table."""
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    protocol = Protocol(_handle)
    assert protocol.answer(WALK) == json.dumps(ANSWER).encode()
    bare_us = _median_us(lambda: json.dumps(json.loads(WALK) and ANSWER).encode(), rounds)
    protocol_us = _median_us(lambda: protocol.answer(WALK), rounds)
    socket_us = _over_the_socket_us(rounds)
    print(f"{'walk line':32} {'us':>8}  ratio")
    print(f"{'json.loads + json.dumps':32} {bare_us:8.1f}  1.0")
    print(f"{'protocol':32} {protocol_us:8.1f}  {protocol_us / bare_us:.1f}")
    print(f"{'client, socket, server':32} {socket_us:8.1f}  {socket_us / bare_us:.1f}")
    print(f"\n{'worst lines':32} {'us':>8}")
    for name, line in WORST.items():
        print(f"{name:32} {_median_us(lambda line=line: protocol.answer(line), 1):8.1f}")  # type: ignore[misc]


if __name__ == "__main__":
    main()
