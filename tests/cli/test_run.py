"""`hobnail run` as a process of its own: on a terminal, in a pipe, stopped, interrupted, twice."""

from __future__ import annotations

import contextlib
import json
import os
import pty
import signal
import socket
import struct
import subprocess
import sys
import termios
from collections.abc import Iterator
from contextlib import contextmanager
from fcntl import ioctl
from pathlib import Path
from typing import Any

import pytest

from command_line import subprocess_environment
from hobnail.cli.main import main
from hobnail.service.client import Client
from robots import CONFIG

TIMEOUT_S = 120.0  # for a machine that is busy; nothing here is about speed
ROUTE = "steps:\n  - forward_mm: 80\n    note: to the door\n  - turn_deg: 15\n"


@pytest.fixture
def config(tmp_path: Path) -> str:
    """juniper, quicker on its feet."""
    text = (CONFIG / "juniper.yaml").read_text()
    for old, new in (("rate_mm_s: 80", "rate_mm_s: 400"), ("wake_interval_ms: 150", "wake_interval_ms: 10")):
        assert old in text
        text = text.replace(old, new)
    path = tmp_path / "quick.yaml"
    path.write_text(text)
    return str(path)


@pytest.fixture
def route(tmp_path: Path) -> str:
    path = tmp_path / "route.yaml"
    path.write_text(ROUTE)
    return str(path)


class Ready:
    """A service manager that is told when the service is ready."""

    def __init__(self, directory: Path) -> None:
        self.path = directory / "notify"
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self._socket.bind(str(self.path))
        self._socket.settimeout(0.2)

    def wait(self, process: subprocess.Popen[str]) -> None:
        with self._socket:
            while process.poll() is None:
                with contextlib.suppress(TimeoutError):
                    if b"READY=1" in self._socket.recv(4096):
                        return
        assert process.stderr is not None
        pytest.fail(f"ended with {process.returncode} before it was ready: {process.stderr.read()}")


@contextmanager
def running(tmp_path: Path, *words: str) -> Iterator[subprocess.Popen[str]]:
    """`hobnail run` with its socket in `tmp_path`, once it is ready; killed if it is left behind."""
    ready = Ready(tmp_path)
    process = subprocess.Popen(
        [sys.executable, "-m", "hobnail.cli.main", "run", *words, "--socket", str(tmp_path / "hobnail.sock")],
        env=subprocess_environment(NOTIFY_SOCKET=str(ready.path)),
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    with process:
        try:
            ready.wait(process)
            yield process
        finally:
            if process.poll() is None:
                process.kill()


def test_a_route_on_a_terminal_is_shown_live_and_ends_off_with_a_summary(
    config: str, route: str, tmp_path: Path
) -> None:
    main_end, terminal = pty.openpty()
    ioctl(terminal, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
    words = ["run", config, "--route", route, "--socket", str(tmp_path / "hobnail.sock")]
    process = subprocess.Popen(
        [sys.executable, "-m", "hobnail.cli.main", *words],
        env=subprocess_environment(TERM="xterm", COLUMNS="", LINES=""),
        stdin=terminal,
        stdout=terminal,
        stderr=terminal,
    )
    os.close(terminal)
    shown = b""
    while True:
        try:
            part = os.read(main_end, 65536)
        except OSError:  # the other end is closed
            break
        if not part:
            break
        shown += part
    os.close(main_end)
    assert process.wait(TIMEOUT_S) == 0
    text = shown.decode()
    live, _, after = text.partition("\x1b[?1049l")
    assert live.startswith("\x1b[?1049h")
    for words_shown in (
        "WAKING",
        "RISING",
        "WALKING",
        "LOWERING",
        "OFF",
        "forward 80 mm (to the door)",
        "left-front",
    ):
        assert words_shown in live
    assert "\n" not in live.replace("\r\n", "")
    assert "standing -> walking" in after  # the log waited for the screen
    for words_shown in (
        "juniper: off",
        "0 clamped",
        "faults",
        "all 2 steps",
    ):
        assert words_shown in after
    assert "walked    about 0.0" in after or "walked    about 0.1" in after
    assert not (tmp_path / "hobnail.sock").exists()


def test_a_route_in_a_pipe_tells_its_steps_and_sums_up_as_json(
    config: str, route: str, tmp_path: Path
) -> None:
    with running(tmp_path, config, "--route", route, "--json") as process:
        out, err = process.communicate(timeout=TIMEOUT_S)
    assert process.returncode == 0
    told = json.loads(out)
    assert told["exit_code"] == 0
    assert told["state"] == "off"
    assert told["route"]["done"] is True
    assert 0.04 < told["distance_m"] < 0.16  # summed from ten snapshots a second, fewer on a busy machine
    assert "\x1b" not in out + err


def test_a_stop_in_the_middle_of_the_route_ends_with_75(config: str, route: str, tmp_path: Path) -> None:
    with running(tmp_path, config, "--route", route, "--plain") as process:
        with Client(tmp_path / "hobnail.sock") as client:
            for told in client.watch(rate_hz=50.0):
                pose: Any = told["pose"]
                if pose["x_m"] > 0.03:
                    break
            client.stop(category=1, reason="a cat")
        out, _ = process.communicate(timeout=TIMEOUT_S)
    assert process.returncode == 75
    assert "route 1/2" in out
    assert "stopped   a cat" in out
    assert "ended in step 1 of 2" in out


def test_a_second_service_on_the_same_socket_is_refused_and_ctrl_c_ends_the_first(
    config: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = str(tmp_path / "hobnail.sock")
    with running(tmp_path, config) as process:
        assert main(["state", "--json", "--socket", path]) == 0
        assert json.loads(capsys.readouterr().out)["state"] == "off"
        assert main(["run", config, "--socket", path]) == 69
        err = capsys.readouterr().err.splitlines()
        assert path in err[-1]
        assert "Traceback" not in "".join(err)
        assert main(["state", "--json", "--socket", path]) == 0  # the first is not harmed
        process.send_signal(signal.SIGINT)
        out, _ = process.communicate(timeout=TIMEOUT_S)
    assert process.returncode == 0
    assert "off after" in out
    assert "Traceback" not in out
