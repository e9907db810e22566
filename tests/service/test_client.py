"""The client against the real server, served by a second thread, and against servers that misbehave."""

from __future__ import annotations

import json
import os
import socket
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from hobnail import errors
from hobnail.service.client import _CLASSES, MAX_STATES, Client
from hobnail.service.protocol import Params
from hobnail.service.server import SocketServer

Answers = Callable[[str, Params, int], object]


@contextmanager
def _serving(path: Path, handler: Answers) -> Iterator[SocketServer]:
    """A server in a thread, as the service has it in its loop: it publishes a state every 10 ms."""
    done = threading.Event()
    server = SocketServer(path, handler)
    server.open()

    def loop() -> None:
        ticks = 0
        while not done.is_set():
            server.serve(server._clock() + 0.01)
            server.publish({"ticks": ticks})
            ticks += 1

    thread = threading.Thread(target=loop)
    thread.start()
    try:
        yield server
    finally:
        done.set()
        thread.join()
        server.close()


class Robot:
    """Answers with what it was asked, or raises what it is told to."""

    def __init__(self) -> None:
        self.calls: list[tuple[str, Params]] = []
        self.error: BaseException | None = None
        self.result: object = {"done": True}

    def __call__(self, method: str, params: Params, _client_id: int) -> object:
        self.calls.append((method, params))
        if self.error is not None:
            raise self.error
        return self.result


@pytest.fixture
def robot() -> Robot:
    return Robot()


@pytest.fixture
def client(tmp_path: Path, robot: Robot) -> Iterator[Client]:
    with _serving(tmp_path / "h.sock", robot), Client(tmp_path / "h.sock", timeout_s=20.0) as made:
        yield made


def test_every_request_of_the_table_has_its_method(client: Client, robot: Robot) -> None:
    client.walk(0.1, 0, -0.2, pivot=(1.0, 0.5), ttl_s=0.3)
    client.walk(0.1, 0.0, 0.0)
    client.stand()
    client.rest()
    client.off()
    client.posture(height_m=0.15, roll_rad=0.1, lean_m=(0.01, 0.0))
    client.gait("trot")
    client.stop()
    client.stop(category=0, reason="smoke")
    client.reset()
    assert client.state() == {"done": True}
    assert client.describe() == {"done": True}
    client.route([{"wait_s": 1}])
    client.route(cancel=True)
    still = {"vy": 0.0, "pivot": (0.0, 0.0), "yaw_rate": 0.0}
    assert robot.calls == [
        ("walk", {"vx": 0.1, "vy": 0.0, "yaw_rate": -0.2, "pivot": (1.0, 0.5), "ttl_s": 0.3}),
        ("walk", {"vx": 0.1, **still}),
        ("stand", {}),
        ("rest", {}),
        ("off", {}),
        ("posture", {"height_m": 0.15, "roll_rad": 0.1, "lean_m": (0.01, 0.0)}),
        ("gait", {"name": "trot"}),
        ("stop", {"category": 1, "reason": ""}),
        ("stop", {"category": 0, "reason": "smoke"}),
        ("reset", {}),
        ("state", {}),
        ("describe", {}),
        ("route", {"steps": [{"wait_s": 1}]}),
        ("route", {"cancel": True}),
    ]


@pytest.mark.parametrize(
    ("raised", "kind"),
    [
        (errors.StateError("walk: the robot lies down"), errors.StateError),
        (errors.StoppedError("a stop is latched"), errors.StoppedError),
        (errors.CommanderError("client 3 commands"), errors.CommanderError),
        (errors.FaultError("bus-error"), errors.FaultError),
        (errors.CommandError("height_m: 9 m"), errors.CommandError),
        (errors.ServiceError("busy"), errors.ServiceError),
        (errors.DriverUnavailableError("no driver"), errors.ServiceError),
        (KeyError("bug"), errors.ServiceError),
    ],
)
def test_errors_come_back_as_what_they_were_with_the_next_step(
    client: Client, robot: Robot, raised: BaseException, kind: type[errors.HobnailError]
) -> None:
    robot.error = raised
    with pytest.raises(errors.HobnailError) as caught:
        client.stand()
    assert type(caught.value) is kind
    assert ". Next: " in str(caught.value)
    if isinstance(raised, errors.HobnailError):
        assert str(raised) in str(caught.value)
        assert caught.value.cause == raised.cause
    robot.error = None
    client.stand()  # and the connection goes on


def test_the_codes_cover_every_error_that_a_service_can_raise() -> None:
    assert set(_CLASSES) == {-32700, *range(-32603, -32599), *range(-32005, -31999)}


def test_wrong_values_are_told_by_name(client: Client, robot: Robot) -> None:
    with pytest.raises(errors.CommandError, match=r"ttl_s: found 99; allowed: a number, 0\.05 to 10 s"):
        client.walk(0, 0, 0, ttl_s=99)
    with pytest.raises(errors.CommandError, match=r"nan.* cannot be sent"):
        client.walk(float("nan"), 0, 0)
    with pytest.raises(errors.CommandError, match="cannot be sent"):
        client.call("walk", vx=object())
    with pytest.raises(errors.ProtocolError, match="did you mean stand"):
        client.call("stnd")
    assert robot.calls == []


def test_scalars_of_numpy_are_numbers(client: Client, robot: Robot) -> None:
    numpy = pytest.importorskip("numpy")
    client.walk(numpy.float32(0.5), numpy.float64(0.25), numpy.int64(1))
    assert robot.calls[0][1] == {"vx": 0.5, "vy": 0.25, "yaw_rate": 1.0, "pivot": (0.0, 0.0)}


# --- watching ---------------------------------------------------------------------------------------


def test_states_are_watched_while_other_requests_are_made(client: Client, robot: Robot) -> None:
    seen: list[int] = []
    states = client.watch(rate_hz=100.0)
    for state in states:
        assert isinstance(state["ticks"], int)
        seen.append(state["ticks"])
        client.stand()
        if len(seen) == 5:
            break
    states.close()  # type: ignore[attr-defined]
    assert seen == sorted(set(seen))
    client.state()
    assert [method for method, _ in robot.calls] == ["stand"] * 5 + ["state"]


def test_states_that_nobody_takes_are_forgotten(client: Client) -> None:
    client.call("watch", rate_hz=100.0)
    for ticks in range(MAX_STATES + 10):
        client._keep_state({"jsonrpc": "2.0", "method": "state", "params": {"ticks": ticks}})
    assert len(client._states) == MAX_STATES


def test_watching_ends_with_the_service(tmp_path: Path, robot: Robot) -> None:
    with _serving(tmp_path / "h.sock", robot) as server:
        client = Client(tmp_path / "h.sock", timeout_s=20.0)
        states = client.watch(rate_hz=100.0)
        next(states)
        server.unwatch(1)
    with pytest.raises(errors.ServiceUnavailableError, match="is gone"):
        for _ in states:
            pass
    with pytest.raises(errors.ServiceUnavailableError, match=r"is gone .*connect again"):
        client.stand()
    client.close()
    with pytest.raises(errors.ServiceUnavailableError):
        client.stand()


# --- nothing there ------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["nothing", "stale", "no directory", "a file"])
def test_without_a_service_the_message_says_how_to_start_one(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "h.sock"
    if kind == "stale":
        with socket.socket(socket.AF_UNIX) as listener:
            listener.bind(str(path))
    elif kind == "no directory":
        path = path / "deeper"
    elif kind == "a file":
        path.write_text("")
    with pytest.raises(errors.ServiceUnavailableError) as caught:
        Client(path)
    assert f"no service answers on {path}: start it with `hobnail run CONFIG` or `systemctl" in str(
        caught.value
    )
    assert caught.value.exit_code == errors.EX_UNAVAILABLE


def test_a_path_that_the_kernel_cannot_take_is_told(tmp_path: Path) -> None:
    with pytest.raises(errors.ServiceUnavailableError, match=r"path too long\. Name the service's socket"):
        Client(tmp_path / ("x" * 200))


def test_without_permission_the_group_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise PermissionError(13, "Permission denied")

    (tmp_path / "h.sock").touch()
    monkeypatch.setattr(socket.socket, "connect", refuse)
    with pytest.raises(errors.ServiceUnavailableError, match=r"for user \w+ and group \w+\. Join") as caught:
        Client(tmp_path / "h.sock")
    assert caught.value.exit_code == errors.EX_NOPERM
    with pytest.raises(errors.ServiceUnavailableError, match="join the service's group"):
        Client(tmp_path / "gone.sock")


def test_the_default_path_is_used(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, robot: Robot) -> None:
    monkeypatch.setenv("HOBNAIL_SOCKET", str(tmp_path / "h.sock"))
    with _serving(tmp_path / "h.sock", robot), Client(timeout_s=20.0) as client:
        client.reset()
    assert robot.calls == [("reset", {})]


# --- servers that misbehave ------------------------------------------------------------------------------


@contextmanager
def _saying(path: Path, *texts: bytes, close: bool = True) -> Iterator[Client]:
    """A client whose server has said these things before it was asked, and then perhaps closed."""
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(path))
        listener.listen()
        with Client(path, timeout_s=20.0) as client:
            served, _ = listener.accept()
            for text in texts:
                served.sendall(text)
            if close:
                served.shutdown(socket.SHUT_WR)
            yield client
            served.close()


_GOOD = b'{"jsonrpc": "2.0", "result": 5, "id": 1}\n'


@pytest.mark.parametrize(
    "text",
    [
        b"HTTP/1.1 400 Bad Request\r\n\r\n",
        b"\xff\n",
        b"[]\n",
        b"{}\n",
        b"[" * 100_000 + b"\n",
        b'{"jsonrpc": "1.0", "result": 5, "id": 1}\n',
        b'{"jsonrpc": "2.0", "id": 1}\n',
        b'{"jsonrpc": "2.0", "result": 5, "id": 2}\n',
        b'{"jsonrpc": "2.0", "result": 5, "id": null}\n',
        b'{"jsonrpc": "2.0", "error": 5, "id": 1}\n',
        b'{"jsonrpc": "2.0", "error": {"code": "x", "message": "y"}, "id": 1}\n',
        b'{"jsonrpc": "2.0", "error": {"code": 1}, "id": 1}\n',
    ],
)
def test_what_is_no_answer_is_called_so(tmp_path: Path, text: bytes) -> None:
    with _saying(tmp_path / "h.sock", text) as client, pytest.raises(errors.ProtocolError):
        client.stand()


def test_an_endless_line_is_given_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("hobnail.service.client.MAX_ANSWER", 10_000)
    with (
        _saying(tmp_path / "h.sock", b"x" * 100_000) as client,
        pytest.raises(errors.ProtocolError, match="more than 10000 bytes"),
    ):
        client.stand()


def test_answers_to_requests_that_were_given_up_are_passed_over(tmp_path: Path) -> None:
    state = b'{"jsonrpc": "2.0", "method": "state", "params": {}}\n'
    late = b'{"jsonrpc": "2.0", "error": {"code": -32000, "message": "late"}, "id": 1}\n'
    with _saying(tmp_path / "h.sock", state, late, state, _GOOD.replace(b"1}", b"2}")) as client:
        client._last_id = 1
        assert client.call("stand") == 5


def test_an_unknown_code_is_a_service_error(tmp_path: Path) -> None:
    text = b'{"jsonrpc": "2.0", "error": {"code": -31999, "message": "odd", "data": [1]}, "id": 1}\n'
    with _saying(tmp_path / "h.sock", text) as client, pytest.raises(errors.ServiceError, match=r"^odd$"):
        client.stand()


def test_a_service_that_does_not_answer_is_given_up(tmp_path: Path) -> None:
    with _saying(tmp_path / "h.sock", close=False) as client:
        client.timeout_s = 1e-6
        with pytest.raises(errors.ServiceTimeoutError, match="did not answer stand within"):
            client.stand()


def test_a_result_of_another_kind_is_refused(client: Client, robot: Robot) -> None:
    robot.result = [1]
    with pytest.raises(errors.ProtocolError, match=r"answered \[1\] to state"):
        client.state()


def test_why_a_client_was_dropped_is_told_although_it_was_sending(tmp_path: Path) -> None:
    farewell = b'{"jsonrpc": "2.0", "error": {"code": -32005, "message": "too many requests"}, "id": null}\n'
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(tmp_path / "h.sock"))
        listener.listen()
        client = Client(tmp_path / "h.sock", timeout_s=20.0)
        served, _ = listener.accept()
        served.sendall(farewell)
        served.close()
        with pytest.raises(errors.ServiceError, match="too many requests"):
            client.stand()
        client.close()


def test_a_client_loads_no_numpy() -> None:
    code = "import sys; from hobnail import Client; print('numpy' in sys.modules, Client.__name__)"
    ran = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)},
    )
    assert ran.stdout.split() == ["False", "Client"]


def test_what_a_client_sends_is_one_json_text_a_line(tmp_path: Path) -> None:
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(tmp_path / "h.sock"))
        listener.listen()
        with Client(tmp_path / "h.sock", timeout_s=20.0) as client:
            served, _ = listener.accept()
            served.sendall(_GOOD)
            client.stop(reason='smoke\n"ü"')
            sent = served.recv(65536)
            served.close()
    assert sent.count(b"\n") == 1
    assert json.loads(sent) == {
        "jsonrpc": "2.0",
        "method": "stop",
        "params": {"category": 1, "reason": 'smoke\n"ü"'},
        "id": 1,
    }
