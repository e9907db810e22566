"""Hazards that clients are: a commander that falls silent or goes away, and clients that run wild.

The real socket server, served by the real loop, and real sockets; time is the
world's, and a request costs some of it.
"""

from __future__ import annotations

import json
import select
import socket
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from campaign.acts import (
    LATCHED,
    end,
    expect_fault,
    heed,
    prove_latched,
    robot_in,
    silent,
    still_once_eased,
)
from campaign.world import World, brisk, demo
from hobnail.service.server import SocketServer

GLIDE_S = 2.5  # from the certified top speed to a stand, with every foot put down
CALL_S = 100e-6  # what a request costs


class Sockets:
    """The real socket server in a world, and raw clients of it."""

    def __init__(self, world: World, directory: Path) -> None:
        self._world = world
        self._path = directory / "hobnail.sock"
        self.clients: list[socket.socket] = []
        world.sockets = SocketServer(
            self._path, self._handle, clock=world.clock, wait=self._wait,
            on_event=self._event,
            on_gone=lambda client: world.machine.client_gone(client, world.clock.now_s),
        )  # fmt: skip
        world.sockets.open()
        self.events: list[tuple[str, int]] = []

    def client(self) -> socket.socket:
        sock = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        sock.setblocking(False)
        sock.connect(str(self._path))
        self.clients.append(sock)
        return sock

    def close(self) -> None:
        if self._world.sockets is not None:
            self._world.sockets.close()
        self._world.sockets = None
        for client in self.clients:
            client.close()

    def _handle(self, method: str, params: Any, client: int) -> object:
        self._world.clock.advance_to(self._world.clock.now_s + CALL_S)
        return self._world.ask(method, client, **params)

    def _event(self, name: str, client: int) -> None:
        self.events.append((name, client))
        if name == "flood":
            self._world.machine.report("client-flood", self._world.clock.now_s, f"client {client}")

    def _wait(self, poll: select.epoll, timeout_s: float) -> None:
        if not select.select([poll], [], [], 0.0)[0]:
            self._world.clock.advance_to(self._world.clock.now_s + timeout_s)


@contextmanager
def sockets_in(world: World) -> Iterator[Sockets]:
    """The server with its clients, for as long as that lasts."""
    with tempfile.TemporaryDirectory() as directory:
        sockets = Sockets(world, Path(directory))
        try:
            yield sockets
        finally:
            sockets.close()


def send(client: socket.socket, method: str, count: int = 1, **params: object) -> None:
    """So many requests, as many as the kernel takes."""
    line = json.dumps({"jsonrpc": "2.0", "id": 1, "method": method, "params": params}).encode() + b"\n"
    with suppress(OSError):
        client.send(line * count)


def commander_silent(state: str) -> str:
    """The client that commands says no more, but stays connected."""
    return _lost(state, leaves=False)


def commander_gone(state: str) -> str:
    """The client that commands goes away."""
    return _lost(state, leaves=True)


def _lost(state: str, *, leaves: bool) -> str:
    robot = brisk(demo(), lost_rest_s=2.0, idle_rest_s=4.0)
    with robot_in(state, robot) as world, sockets_in(world) as sockets:
        world.witness.may_be_late_s = 2 * CALL_S
        commander = sockets.client()  # the first one is client 1, who led the robot here
        if state == "walking":
            for _ in range(10):
                send(commander, "walk", vx=0.2)
                world.run(0.05)
            assert world.told()["command"]["holder"] == 1
        if leaves:
            commander.close()
        began_s = world.clock.now_s
        ttl_s = 0.0 if leaves else robot.safety.command_ttl_s
        if state == "walking":
            world.run(ttl_s + 2 * robot.period_s)
            told = world.told()
            assert told["command"]["vx_m_s"] == 0.0, "the command outlives its time to live"
            expect_fault(world, "commander-lost")
            world.until("standing", GLIDE_S)
            still_once_eased(world, 0.5)
            world.until("resting", robot.safety.lost_rest_s + 2.0)
        else:
            world.run(0.5)
            names = [fault["name"] for fault in world.told()["faults"]]
            assert "commander-lost" not in names, "nobody was walking it"
        wanted = "stopped" if state in LATCHED else "off"
        world.until(wanted, robot.safety.idle_rest_s + 10.0)
        silent(world, 0.1)
        assert world.witness.all_full_off()
        took_s = world.clock.now_s - began_s
    lost = f"zero within {ttl_s:g} s, stood, rested, " if state == "walking" else ""
    return f"{lost}{wanted} after {took_s:.1f} s" if state not in ("off", *LATCHED) else f"stays {wanted}"


def clients_run_wild(state: str) -> str:
    """One floods with 2000 requests a second, one never reads, one sends garbage; a fourth stops."""
    with robot_in(state) as world, sockets_in(world) as sockets:
        world.witness.may_be_late_s = 5 * CALL_S
        flooder, deaf, drunk, calm = (sockets.client() for _ in range(4))
        send(deaf, "watch", rate_hz=100)

        def wild() -> None:
            send(flooder, "state", 20)
            with suppress(OSError):
                drunk.send(b'{"jsonrpc": "2.0", "method": [[[[\n\xff\xfe\n' * 3)

        world.run(1.0, wild)
        heed(world)
        assert any(event == "flood" for event, _ in sockets.events), "the flood was not noticed"
        if state not in LATCHED:
            assert world.state != "stopped", "wild clients must not stop the robot"
        send(calm, "stop", category=0)
        world.run(3 * world.robot.period_s, wild)
        assert world.state == "stopped", f"{world.state}: a stop was not heard within three ticks"
        silent(world, 0.2)
        dropped = sum(event == "dropped" for event, _ in sockets.events)
        sockets.close()
        prove_latched(world)
        end(world)
    return f"ticks on time; {dropped} dropped; a stop among them heard within three ticks"
