"""The socket server in good weather: order, time, watching, life; real sockets, a false clock."""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

import pytest

from hobnail.errors import ServiceError, StateError
from hobnail.service.protocol import Params
from hobnail.service.server import EARLY_S, SocketServer
from socket_bench import PERIOD_S, Bench, bench, request


@pytest.fixture
def at(tmp_path: Path) -> Iterator[Bench]:
    with bench(tmp_path / "h.sock") as made:
        yield made


def _ids(answers: list[dict[str, object]]) -> list[object]:
    return [answer["id"] for answer in answers]


# --- requests and answers ---------------------------------------------------------------------


def test_a_request_is_handled_and_answered_within_one_period(at: Bench) -> None:
    client = at.client()
    client.ask("walk", 7, vx=0.1)
    at.run(PERIOD_S)
    (answer,) = client.answers()
    assert answer["id"] == 7
    assert at.calls == [("walk", {"vx": 0.1, "vy": 0.0, "yaw_rate": 0.0, "pivot": (0.0, 0.0)}, 1)]
    assert at.errors == []


def test_many_requests_in_one_write_are_answered_in_order(at: Bench) -> None:
    client = at.client()
    client.send(b"".join(request("state", i) for i in range(50)))
    at.run()
    assert _ids(client.answers()) == list(range(50))


def test_a_line_may_come_byte_by_byte(at: Bench) -> None:
    client = at.client()
    for byte in request("state", 1):
        client.send(bytes([byte]))
        at.run(PERIOD_S)
    assert _ids(client.answers()) == [1]


def test_blank_lines_are_passed_over_and_crlf_is_a_line_end(at: Bench) -> None:
    client = at.client()
    client.send(b"\n\r\n \t\n" + request("state", 1)[:-1] + b"\r\n\n")
    at.run()
    assert _ids(client.answers()) == [1]


def test_what_stands_before_the_end_without_a_line_end_is_carried_out(at: Bench) -> None:
    client = at.client()
    client.send(request("stand", 1) + request("stop", 2)[:-1])
    client.socket.shutdown(1)
    at.run()
    assert _ids(client.answers()) == [1, 2]
    assert client.is_closed
    assert at.gone == [1]


def test_what_a_client_sent_before_it_closed_is_carried_out_before_it_is_gone(at: Bench) -> None:
    order: list[str] = []
    at.server._on_gone = lambda _client_id: order.append("gone")
    at.server._handler = lambda method, _params, _client_id: order.append(method)
    client = at.client()
    client.send(request("stand", 1) + request("stop", 2) + b'{"half a li')
    client.close()
    at.run()
    assert order == ["stand", "stop", "gone"]
    assert at.events == [("garbage", 1)]
    assert at.server.clients == ()


def test_a_batch_is_one_answer_and_its_calls_take_turns_with_other_clients(at: Bench) -> None:
    batcher, other = at.client(), at.client()
    calls = b", ".join(request("state", i)[:-1] for i in range(10))
    batcher.send(b"[" + calls + b"]\n")
    other.send(b"".join(request("stand", i) for i in range(10)))
    at.run()
    (answer,) = batcher.answers()
    assert isinstance(answer, list)
    assert _ids(answer) == list(range(10))
    assert _ids(other.answers()) == list(range(10))
    methods = [method for method, _, _ in at.calls]
    assert methods[2:18] in (["state", "stand"] * 8, ["stand", "state"] * 8)


def test_errors_of_the_handler_reach_the_client_and_bugs_the_owner(at: Bench) -> None:
    client = at.client()

    def handle(method: str, _params: Params, _client_id: int) -> object:
        raise StateError("stand first") if method == "walk" else KeyError("bug")

    at.server._handler = handle
    client.send(request("walk", 1) + request("rest", 2))
    at.run()
    first, second = client.answers()
    assert isinstance(first["error"], dict)
    assert isinstance(second["error"], dict)
    assert (first["error"]["code"], second["error"]["code"]) == (-32000, -32603)
    assert [type(error) for _, error in at.errors] == [KeyError]


def test_a_callback_that_fails_is_reported_and_harms_nobody(at: Bench) -> None:
    def fail(*_: object) -> None:
        raise KeyError("bug")

    at.server._on_event = fail
    at.server._on_gone = fail
    noisy, quiet = at.client(), at.client()
    noisy.send(b"rubbish\n")
    at.run()
    noisy.close()
    quiet.ask("state", 1)
    at.run()
    assert _ids(quiet.answers()) == [1]
    assert [where for where, _ in at.errors] == ["on_event", "on_gone"]
    at.server._on_error = fail  # and nobody left to tell
    at.client().send(b"rubbish\n")
    at.run()


# --- time -----------------------------------------------------------------------------------------


def test_idle_time_is_waited_for_in_one_piece_and_its_end_left_to_the_loop(at: Bench) -> None:
    at.client()
    at.run()
    at.clock.waits_s.clear()
    began_s = at.clock.now_s
    at.server.serve(began_s + PERIOD_S)
    assert len(at.clock.waits_s) == 1
    assert began_s + PERIOD_S - 1.1 * EARLY_S < at.clock.now_s < began_s + PERIOD_S - 0.9 * EARLY_S


def test_a_client_in_debt_is_served_as_its_credit_comes_not_at_the_end_of_the_wait(at: Bench) -> None:
    client = at.client()
    client.send(request("state") * 200)
    at.server.serve(at.clock.now_s + 0.4)
    assert len(at.calls) == 200
    assert max(at.clock.waits_s) < 0.01 + 0.4 - 75 / 250


@pytest.mark.parametrize("call_s", [0.0001, 0.001, 0.002])
def test_no_bite_is_begun_that_would_not_end_in_time(at: Bench, call_s: float) -> None:
    """With calls of one length, known after the first, no call ends after its period."""
    clients = [at.client() for _ in range(4)]
    at.call_s = call_s
    clients[0].ask("state")
    at.run()
    for client in clients:
        client.send(b"".join(request("state", i) for i in range(30)))
    periods = 0
    while len(at.calls) < 121:
        until_s = at.clock.now_s + PERIOD_S
        at.server.serve(until_s)
        assert at.clock.now_s <= until_s
        at.clock.now_s = until_s
        periods += 1
        assert periods < 1000
    assert periods <= 1.6 * 120 * call_s / PERIOD_S + 2  # and most of the time was used


def test_one_slow_bite_does_not_silence_the_server(at: Bench) -> None:
    client = at.client()
    at.call_s = 1.0
    client.ask("state")
    at.run()
    at.call_s = 0.0001
    client.send(b"".join(request("state", i) for i in range(60)))
    until_s = at.clock.now_s + PERIOD_S
    at.server.serve(until_s)
    assert len(at.calls) == 61
    assert at.clock.now_s <= until_s


def test_a_loop_that_is_always_late_still_hears_everybody(at: Bench) -> None:
    clients = [at.client() for _ in range(5)]
    at.run()
    for i, client in enumerate(clients):
        client.ask("stop" if i == 4 else "state")
    for _ in range(12):
        at.server.serve(at.clock.now_s - 1.0)
    assert sorted(client_id for _, _, client_id in at.calls) == [1, 2, 3, 4, 5]
    assert at.clock.waits_s[-1] > 0.0  # of the run before: none since


def test_serving_before_opening_says_so(tmp_path: Path) -> None:
    server = SocketServer(tmp_path / "h.sock", lambda *_: None)
    server.close()
    with pytest.raises(ServiceError, match="not open"):
        server.serve(0.0)


def test_the_real_clock_and_the_real_wait_work_together(tmp_path: Path) -> None:
    with SocketServer(tmp_path / "h.sock", lambda *_: 1) as server:
        server.serve(server._clock() + 0.002)
        server.serve(server._clock() - 1.0)
    assert list(tmp_path.iterdir()) == []


# --- watching ---------------------------------------------------------------------------------------


def _watch_for(at: Bench, seconds: float) -> None:
    for i in range(round(seconds / PERIOD_S)):
        if at.server.state_due():
            at.server.publish({"tick": i})
        at.run(PERIOD_S)
        for client in at.clients:
            client.receive()


def _states(answers: list[dict[str, object]]) -> int:
    return sum(answer.get("method") == "state" for answer in answers)


def test_each_watcher_gets_states_at_its_own_rate(at: Bench) -> None:
    rates_hz = [1.0, 10.0, 30.0, 100.0]
    clients = [at.client() for _ in rates_hz]
    other = at.client()
    for client, rate_hz in zip(clients, rates_hz, strict=True):
        client.ask("watch", 1, rate_hz=rate_hz)
    at.run()
    _watch_for(at, 4.0)
    for client, rate_hz in zip(clients, rates_hz, strict=True):
        answers = client.answers()
        assert answers[0] == {"jsonrpc": "2.0", "result": {"rate_hz": rate_hz}, "id": 1}
        assert abs(_states(answers) - 4.0 * rate_hz) <= 2 + 0.02 * 4.0 * rate_hz
        assert answers[1] == {"jsonrpc": "2.0", "method": "state", "params": {"tick": 0}}
    assert other.answers() == []
    assert at.calls == []  # watching is the server's own business


def test_a_state_a_tick_is_not_thinned_out_by_uneven_ticks(at: Bench) -> None:
    client = at.client()
    at.run()
    at.server.watch(1, 100.0)
    for i in range(200):
        at.server.publish({})
        at.run(PERIOD_S + (0.001 if i % 2 else -0.001))
        client.receive()
    at.run()
    assert _states(client.answers()) >= 198


def test_watching_ends_on_request_and_by_the_owner(at: Bench) -> None:
    client = at.client()
    client.ask("watch", 1)
    at.run()
    client.ask("watch", 2, rate_hz=0)
    at.run()
    assert not at.server.state_due()
    at.server.watch(1, 50.0)
    assert at.server.state_due()
    at.server.unwatch(1)
    at.server.watch(99)  # nobody
    assert not at.server.state_due()


def test_a_pause_of_the_owner_is_not_made_up_for_by_a_burst(at: Bench) -> None:
    client = at.client()
    client.ask("watch", 1, rate_hz=10.0)
    at.run()
    at.server.publish({})
    at.clock.now_s += 60.0
    _watch_for(at, 1.0)
    assert _states(client.answers()) <= 13


def test_a_state_is_encoded_once_for_all_and_only_for_those_who_wait(
    at: Bench, monkeypatch: pytest.MonkeyPatch
) -> None:
    made: list[object] = []

    def count(_method: str, params: object) -> bytes:
        made.append(params)
        return b"{}"

    monkeypatch.setattr("hobnail.service.server.notification", count)
    at.server.publish({"a": 1})
    for client in (at.client(), at.client(), at.client()):
        client.ask("watch")
    at.run()
    at.server.publish({"a": 2})
    at.server.publish({"a": 3})
    assert made == [{"a": 2}]


def test_a_state_that_is_no_json_is_reported_and_not_sent(at: Bench) -> None:
    client = at.client()
    client.ask("watch", 1)
    at.run()
    at.server.publish({"a": float("nan")})
    at.server.publish({"a": {1, 2}})
    at.run()
    assert _ids(client.answers()) == [1]
    assert [where for where, _ in at.errors] == ["publish", "publish"]


# --- life -----------------------------------------------------------------------------------------------


def test_the_process_at_the_other_end_is_known(at: Bench) -> None:
    at.client()
    at.run()
    assert at.server.peer(1) == (os.getpid(), os.getuid(), os.getgid())
    assert at.server.peer(2) is None


def test_closing_ends_every_connection_and_may_be_repeated(at: Bench) -> None:
    client = at.client()
    at.run()
    at.server.close()
    at.server.close()
    client.receive()
    assert client.is_closed
    assert not at.server.path.exists()


def test_ids_of_clients_are_not_used_again(at: Bench) -> None:
    for _ in range(3):
        client = at.client()
        at.run()
        client.close()
        at.run()
    assert at.gone == [1, 2, 3]
