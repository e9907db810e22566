"""Many clients doing random things, while well-behaved ones always get their right answers in order."""

from __future__ import annotations

import tempfile
from pathlib import Path

from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from hobnail.service.connection import CHUNK, Limits
from hobnail.service.server import SPARE_PLACES
from jsonrpc_judge import assert_answer_is_valid
from socket_bench import PERIOD_S, Bench, RawClient, request

_PLACES = 6
_LIMITS = Limits(max_line=2000, max_queue=4000)
_POLITE = 2


class Crowd(RuleBasedStateMachine):
    """Two polite clients come first and stay; the others come, misbehave and go."""

    def __init__(self) -> None:
        super().__init__()
        self.directory = tempfile.TemporaryDirectory()
        self.at = Bench(
            Path(self.directory.name) / "h.sock",
            max_clients=_PLACES,
            max_line=_LIMITS.max_line,
            max_queue=_LIMITS.max_queue,
        )
        self.polite: list[RawClient] = []
        self.asked = [0] * _POLITE
        self.rude: list[RawClient] = []

    @initialize()
    def the_polite_come_first(self) -> None:
        self.polite = [self.at.client() for _ in range(_POLITE)]
        self.at.run(PERIOD_S)

    @precondition(lambda self: len(self.rude) < 12)
    @rule()
    def come(self) -> None:
        self.rude.append(self.at.client())

    @precondition(lambda self: self.rude)
    @rule(data=st.data(), times=st.integers(1, 100))
    def say(self, data: st.DataObject, times: int) -> None:
        text = data.draw(
            st.binary(max_size=60)
            | st.sampled_from(
                [
                    b"\n",
                    request("state", 1),
                    request("watch", 1, rate_hz=100),
                    request("state", 1)[:30],
                    request("stop"),
                    request("walk", 1, vx="fast"),
                    b"[" + b",".join([request("describe", 1)[:-1]] * 16) + b"]\n",
                    b"[" * 50 + b"\n",
                    b"x" * 500,
                ]
            )
        )
        data.draw(st.sampled_from(self.rude)).send(text * times)

    @precondition(lambda self: self.rude)
    @rule(data=st.data(), how=st.sampled_from(["close", "end", "deaf", "read"]))
    def change(self, data: st.DataObject, how: str) -> None:
        client = data.draw(st.sampled_from(self.rude))
        if how == "close":
            client.close()
            self.rude.remove(client)
        elif how == "read":
            client.receive()
        elif not client.is_closed:
            try:
                client.socket.shutdown(1 if how == "end" else 0)
            except OSError:
                client.is_closed = True

    @rule(rounds=st.integers(1, 5))
    def serve_late(self, rounds: int) -> None:
        for _ in range(rounds):
            self.at.server.serve(self.at.clock.now_s - 1.0)

    @rule()
    def publish(self) -> None:
        self.at.server.publish({"ballast": "x" * 100})

    @rule(which=st.integers(0, _POLITE - 1), count=st.integers(1, 3))
    def ask_politely(self, which: int, count: int) -> None:
        client = self.polite[which]
        first = self.asked[which]
        for _ in range(count):
            self.asked[which] += 1
            client.ask("walk" if which else "state", self.asked[which])
        self.at.run(2 * PERIOD_S)
        answers = client.answers()
        assert [answer["id"] for answer in answers] == list(range(first + 1, first + count + 1))
        assert all("result" in answer for answer in answers)

    @invariant()
    def bounded(self) -> None:
        places = _PLACES + SPARE_PLACES
        assert len(self.at.server.clients) <= places
        longest_answer = 16 * 300  # a batch of errors
        a_client = _LIMITS.max_line + CHUNK + _LIMITS.max_queue + longest_answer
        assert self.at.server.buffered_bytes <= places * a_client

    @invariant()
    def the_polite_are_in(self) -> None:
        assert set(range(1, len(self.polite) + 1)) <= set(self.at.server.clients)
        assert self.at.errors == []

    def teardown(self) -> None:
        for client in self.rude:
            client.receive()
            for line in client.inbox.split(b"\n")[:-1]:
                if b'"method": "state", "params"' not in line:
                    assert_answer_is_valid(line)
        for client in self.at.clients:
            client.close()
        self.at.run(5.0)
        assert self.at.server.clients == ()
        assert sorted(self.at.gone) == list(range(1, len(self.at.gone) + 1))
        self.at.close()
        self.directory.cleanup()


TestCrowd = Crowd.TestCase
TestCrowd.settings = settings(max_examples=60, stateful_step_count=40, deadline=None)
