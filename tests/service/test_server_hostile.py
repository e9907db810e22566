"""The socket server against clients that flood, stall, swell, crowd and vanish: real sockets, false clock."""

from __future__ import annotations

import os
import resource
import socket
import struct
from collections.abc import Iterator
from pathlib import Path

import pytest

from hobnail.service.connection import CHUNK, Limits
from hobnail.service.link import MAX_OUTPUT
from hobnail.service.server import SPARE_PLACES, SPARE_S
from socket_bench import PERIOD_S, Bench, RawClient, bench, request

_LIMITS = Limits()


@pytest.fixture
def at(tmp_path: Path) -> Iterator[Bench]:
    with bench(tmp_path / "h.sock") as made:
        yield made


def _error(answer: dict[str, object]) -> dict[str, object]:
    error = answer["error"]
    assert isinstance(error, dict)
    return error


def _asked_by(at: Bench, client_id: int) -> list[str]:
    return [method for method, _, caller in at.calls if caller == client_id]


# --- floods -----------------------------------------------------------------------------------------


def _flood(client: RawClient, at: Bench, seconds: float) -> None:
    """As many requests as the kernel takes, every millisecond."""
    for _ in range(round(seconds / 0.001)):
        client.send(request("state") * 20)
        at.run(0.001)


def test_a_flood_is_slowed_to_its_share_then_told_then_ended(at: Bench) -> None:
    flooder = at.client()
    at.run()
    began_s = at.clock.now_s
    while not flooder.is_closed:
        flooder.send(request("state") * 20)
        at.run(0.001)
        assert at.clock.now_s < began_s + 5.0
    took_s = at.clock.now_s - began_s
    assert at.events == [("flood", 1), ("dropped", 1)]
    assert at.gone == [1]
    assert _LIMITS.flood_s <= took_s <= _LIMITS.flood_s + 0.1
    # No more than its credit, with half a percent for the size of its lines.
    assert 0.95 <= len(at.calls) / (_LIMITS.burst + took_s * _LIMITS.rate_hz) <= 1.0
    assert "more than 250 requests a second" in str(_error(flooder.answers()[-1])["message"])


def test_others_are_served_at_once_while_one_floods(at: Bench) -> None:
    flooder, polite = at.client(), at.client()
    at.run()
    answered = 0
    for i in range(100):
        flooder.send(request("state") * 100)
        polite.ask("walk", i)
        at.run(PERIOD_S)
        answers = polite.answers()
        assert [answer["id"] for answer in answers] == [i]
        answered += len(answers)
    assert answered == 100
    assert ("dropped", 1) in at.events
    assert all(client_id == 1 for _, client_id in at.events)


def test_a_stop_waits_for_one_round_at_most_however_many_flood(at: Bench) -> None:
    flooders = [at.client() for _ in range(15)]
    at.run()
    stopper = at.client()
    at.run()
    for flooder in flooders:
        flooder.send(request("state") * 500)
    for _ in range(20):  # somewhere in their backlog
        at.server.serve(0.0)
    before = len(at.calls)
    stopper.ask("stop")
    # One bite a call: a round is the fifteen others, the listening socket and the stopper.
    for _ in range(17):
        at.server.serve(0.0)
    methods = [method for method, _, _ in at.calls[before:]]
    assert "stop" in methods
    assert len(methods) > 10


def test_a_stop_overtakes_the_debt_of_its_own_client_but_not_its_order(at: Bench) -> None:
    client = at.client()
    at.run()
    lines = round(_LIMITS.burst) + 50
    client.send(request("walk") * lines + request("stop") + request("walk") * 20)
    at.run(PERIOD_S)
    assert _asked_by(at, 1)[: lines + 1] == ["walk"] * lines + ["stop"]
    assert len(at.calls) < lines + 10  # what follows it waits again


def test_a_client_that_waits_for_its_answers_is_slowed_and_no_flood(at: Bench) -> None:
    client = at.client()
    at.run()
    began_s = at.clock.now_s
    asked = 0
    client.ask("state", 0)
    while at.clock.now_s < began_s + 3.0:
        at.run(0.0005)
        if client.answers():
            asked += 1
            client.ask("state", asked)
    assert at.events == []
    assert 0.85 <= asked / (_LIMITS.burst + 3.0 * _LIMITS.rate_hz) <= 1.01


def test_a_batch_costs_as_much_as_its_calls_and_a_long_line_more_than_a_short_one(at: Bench) -> None:
    batcher, talker = at.client(), at.client()
    at.run()
    batch = b"[" + b", ".join([request("state")[:-1]] * 16) + b"]\n"
    long_line = request("state")[:-1] + b" " * 20_000 + b"\n"
    batcher.send(batch * 12)
    talker.send(long_line * 5)
    for _ in range(5):
        talker.send(long_line * 5)
        at.run(0.001)
    assert len(_asked_by(at, 1)) <= _LIMITS.burst + 16 + 4
    assert len(_asked_by(at, 2)) <= _LIMITS.burst / 5 + 2


def test_a_backlog_of_a_flooder_that_left_is_not_carried_out(at: Bench) -> None:
    """A dead client's `walk` must not come seconds after its death."""
    client = at.client()
    at.run()
    client.send(request("walk") * 250)
    client.close()
    at.run(PERIOD_S)
    assert at.gone == [1]
    assert len(at.calls) <= _LIMITS.burst + 5


# --- lines that are too long --------------------------------------------------------------------------


def test_a_line_beyond_the_limit_is_answered_once_and_thrown_away(at: Bench) -> None:
    client = at.client()
    for part in (b"x" * 60_000, b"y" * 60_000, b"z" * 100_000, b"\n" + request("state", 1)):
        client.send(part)
        at.run()
    refusal, answer = client.answers()
    assert (_error(refusal)["code"], refusal["id"], answer["id"]) == (-32700, None, 1)
    assert at.events == [("garbage", 1)]


@pytest.mark.parametrize("length", [65536, 65537, 70000, 65536 + CHUNK])
def test_the_limit_is_where_it_says(at: Bench, length: int) -> None:
    client = at.client()
    line = request("state", 1)[:-1].ljust(length) + b"\n"
    while line:
        line = line[client.send(line) :]
        at.run(PERIOD_S)
    client.ask("state", 2)
    at.run()
    first, second = client.answers()
    assert ("error" in first, second["id"]) == (length > 65536, 2)


def test_a_line_of_100_mb_takes_constant_memory_and_ends_the_client(at: Bench) -> None:
    client, polite = at.client(), at.client()
    at.run()
    left, most = 100_000_000, 0
    rounds = 0
    while left > 0 and not client.is_closed:
        left -= max(0, client.send(b"x" * min(left, 200_000)))
        if rounds % 5 == 0:
            polite.ask("state", rounds)
        at.server.serve(at.clock.now_s + 0.001)
        most = max(most, at.server.buffered_bytes)
        rounds += 1
        client.receive()
    assert client.is_closed
    assert left > 98_000_000  # ended after about a megabyte
    assert most <= 65536 + CHUNK + 2000
    assert at.gone == [1]
    assert ("dropped", 1) in at.events
    at.run()
    assert len(polite.answers()) == (rounds + 4) // 5


def test_half_a_line_may_wait_for_ever(at: Bench) -> None:
    halves = [at.client() for _ in range(10)]
    for half in halves:
        half.send(request("state", 1)[:20])
    at.run()
    at.clock.waits_s.clear()
    at.run(60.0)
    assert len(at.clock.waits_s) <= 6200  # one a period: nobody is asked again and again
    for half in halves:
        half.send(request("state", 1)[20:])
    at.run()
    assert [len(half.answers()) for half in halves] == [1] * 10


# --- clients that do not read --------------------------------------------------------------------------


def test_a_watcher_that_does_not_read_is_ended_and_its_queue_is_bounded(at: Bench) -> None:
    deaf, other = at.client(), at.client()
    deaf.ask("watch", rate_hz=100)
    other.ask("watch", rate_hz=100)
    at.run()
    most = 0
    for i in range(2000):
        at.server.publish({"tick": i, "ballast": "x" * 2000})
        at.run(PERIOD_S)
        other.receive()
        most = max(most, at.server.buffered_bytes)
        if at.gone:
            break
    assert at.gone == [1]
    assert at.events == [("dropped", 1)]
    assert 200_000 < most <= _LIMITS.max_queue + MAX_OUTPUT
    assert at.server.clients == (2,)


def test_an_answer_larger_than_the_queue_reaches_a_client_that_reads(at: Bench) -> None:
    client = at.client()
    at.server._handler = lambda *_: "x" * 1_000_000
    client.ask("describe", 1)
    for _ in range(20):
        at.run(PERIOD_S)
        client.receive()
    (answer,) = client.answers()
    assert len(str(answer["result"])) == 1_000_000


def test_waiting_for_a_client_to_read_keeps_the_server_asleep(at: Bench) -> None:
    client = at.client()
    at.server._handler = lambda *_: "x" * 1_000_000
    client.ask("describe", 1)
    at.run()
    at.clock.waits_s.clear()
    at.run(1.0)
    assert 90 <= len(at.clock.waits_s) <= 110


# --- crowds ---------------------------------------------------------------------------------------------


def test_beyond_the_limit_of_clients_a_request_is_refused_but_a_stop_is_heard(tmp_path: Path) -> None:
    with bench(tmp_path / "h.sock", max_clients=3) as at:
        inside = [at.client() for _ in range(3)]
        at.run()
        walker, stopper = at.client(), at.client()
        walker.ask("walk", 1)
        stopper.ask("stop", 2)
        at.run()
        (refusal,) = walker.answers()
        (answer,) = stopper.answers()
        assert (_error(refusal)["code"], refusal["id"]) == (-32005, 1)
        assert "all 3 places" in str(_error(refusal)["message"])
        assert answer["id"] == 2
        assert "result" in answer
        assert [method for method, _, _ in at.calls] == ["stop"]
        assert walker.is_closed
        assert stopper.is_closed
        assert at.events == [("refused", 4)]
        for client in inside:
            client.ask("state", 1)
        at.run()
        assert [len(client.answers()) for client in inside] == [1, 1, 1]


def test_beyond_the_limit_of_clients_one_that_says_nothing_is_refused_soon(tmp_path: Path) -> None:
    with bench(tmp_path / "h.sock", max_clients=1) as at:
        at.client()
        at.run()
        silent = at.client()
        at.run(SPARE_S - 2 * PERIOD_S)
        assert silent.answers() == []
        at.run(3 * PERIOD_S)
        (refusal,) = silent.answers()
        assert (_error(refusal)["code"], refusal["id"]) == (-32005, None)
        assert silent.is_closed
        assert at.gone == [2]


def test_a_place_that_becomes_free_goes_to_who_waits_for_it(tmp_path: Path) -> None:
    with bench(tmp_path / "h.sock", max_clients=1) as at:
        first = at.client()
        at.run()
        second = at.client()
        at.run()
        first.close()
        at.run()
        second.ask("walk", 1)
        at.run(1.0)
        second.ask("walk", 2)
        at.run()
        assert [answer["id"] for answer in second.answers()] == [1, 2]
        assert at.events == []


def test_a_thousand_connections_leave_the_others_served_and_a_stop_heard(at: Bench) -> None:
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    resource.setrlimit(resource.RLIMIT_NOFILE, (min(hard, 4096), hard))
    try:
        polite = at.client()
        at.run()
        most = 0
        for i in range(1000):
            at.client()
            if i % 20 == 0:
                polite.ask("state", i)
                at.run(PERIOD_S)
                most = max(most, len(at.server.clients))
                assert [answer["id"] for answer in polite.answers()] == [i]
        assert most == 16 + SPARE_PLACES
        stopper = at.client()
        stopper.ask("stop", 1)
        at.run()
        assert "result" in stopper.answers()[0]
        at.run(1.0)
        assert len(at.server.clients) == 16
        assert len(at.gone) == 1000 + 2 - 16
        assert {name for name, _ in at.events} == {"refused"}
    finally:
        for client in at.clients:
            client.close()
        resource.setrlimit(resource.RLIMIT_NOFILE, (soft, hard))


def test_without_file_descriptors_the_server_pauses_accepting_and_recovers(at: Bench) -> None:
    polite = at.client()
    at.run()
    waiting = at.client()
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    lowest_free = os.dup(0)
    os.close(lowest_free)
    resource.setrlimit(resource.RLIMIT_NOFILE, (lowest_free, hard))
    try:
        at.clock.waits_s.clear()
        polite.ask("state", 1)
        at.run(1.0)
        assert len(polite.answers()) == 1
        assert 90 <= len(at.clock.waits_s) <= 220  # it neither spins nor sleeps through
    finally:
        resource.setrlimit(resource.RLIMIT_NOFILE, (soft, hard))
    assert [where for where, _ in at.errors] == ["accept"]
    waiting.ask("state", 2)
    at.run(0.2)
    assert len(waiting.answers()) == 1


# --- clients that vanish ----------------------------------------------------------------------------------


@pytest.mark.parametrize("sent", [b"", b"{", request("state", 1), request("state", 1) * 3, b"x" * 100_000])
@pytest.mark.parametrize("rounds", [0, 1, 2, 3])
def test_a_client_may_close_at_any_moment(at: Bench, sent: bytes, rounds: int) -> None:
    client, polite = at.client(), at.client()
    client.send(sent)
    for _ in range(rounds):
        at.server.serve(0.0)
    client.close()
    polite.ask("state", 1)
    at.run(0.05)
    assert len(polite.answers()) == 1
    assert at.server.clients == (at.calls[-1][2],) or at.server.clients == (2,)
    assert len(at.gone) == 1
    assert at.errors == []


def test_a_client_that_is_reset_or_stops_reading_or_writing_does_no_harm(at: Bench) -> None:
    reset, deaf, dumb = at.client(), at.client(), at.client()
    at.run()
    for client in (reset, deaf, dumb):
        client.ask("state", 1)
    reset.socket.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
    reset.close()
    deaf.socket.shutdown(socket.SHUT_RD)
    dumb.socket.shutdown(socket.SHUT_WR)
    at.run()
    deaf.ask("stop", 2)
    at.run()
    assert sorted((client_id, method) for method, _, client_id in at.calls) == [
        (1, "state"),
        (2, "state"),
        (2, "stop"),
        (3, "state"),
    ]
    assert len(dumb.answers()) == 1
    assert at.server.clients == (2,)
    at.clock.waits_s.clear()
    at.run(1.0)
    assert len(at.clock.waits_s) <= 110


def test_garbage_is_answered_told_and_charged_for(at: Bench) -> None:
    client = at.client()
    client.send(b"\xff\xfe\n{\n[1]\n17\n" + request("state", 1))
    at.run()
    *refusals, answer = client.answers()
    assert answer["id"] == 1
    assert len(refusals) == 4
    assert at.events == [("garbage", 1)] * 3  # a batch with a wrong entry is no garbage
    client.send(b"x\n" * 200)
    at.run(PERIOD_S)
    assert at.events.count(("garbage", 1)) <= _LIMITS.burst + 5
