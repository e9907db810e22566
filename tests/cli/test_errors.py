"""What goes wrong around a command: nobody answers, files that are none; a line, a code, no traceback."""

from __future__ import annotations

import socket
import threading
from pathlib import Path

import pytest

from command_line import hobnail
from hobnail.cli.main import main
from robots import CONFIG

Output = pytest.CaptureFixture[str]

JUNIPER = str(CONFIG / "juniper.yaml")
TALKING = (["stand"], ["rest"], ["off"], ["stop"], ["reset"], ["state"], ["watch"], ["walk", "--vx", "0.1"])


def last_line(output: Output) -> str:
    told = output.readouterr()
    assert told.out == ""
    assert "Traceback" not in told.err
    line: str = told.err.splitlines()[-1]
    assert line.startswith("hobnail: ")
    return line


@pytest.mark.parametrize("words", [*TALKING, ["route", "--cancel"]], ids=lambda words: words[0])
def test_without_a_service_every_command_says_how_to_start_one(
    words: list[str], tmp_path: Path, capsys: Output
) -> None:
    assert main([*words, "--socket", str(tmp_path / "none.sock")]) == 69
    line = last_line(capsys)
    assert f"no service answers on {tmp_path}/none.sock" in line
    assert "hobnail run CONFIG" in line


def test_a_stop_that_reached_nobody_says_so_and_what_to_do(tmp_path: Path, capsys: Output) -> None:
    assert main(["stop", "--socket", str(tmp_path / "none.sock")]) == 69
    first = capsys.readouterr().err.splitlines()[0]
    assert first == (
        "hobnail: NOT STOPPED by this command: cut the servo supply, or run `hobnail-release` on the robot"
    )


@pytest.mark.parametrize("kind", ["file", "directory", "dead socket"])
def test_a_socket_that_is_none(kind: str, tmp_path: Path, capsys: Output) -> None:
    path = tmp_path / "it"
    if kind == "file":
        path.write_text("")
    elif kind == "directory":
        path.mkdir()
    else:
        with socket.socket(socket.AF_UNIX) as listener:
            listener.bind(str(path))
    assert main(["state", "--socket", str(path)]) == 69
    assert str(path) in last_line(capsys)


@pytest.mark.parametrize(
    ("answer", "code", "words"),
    [
        (b"", 69, "did not answer state within 0.2 s"),
        (b"hello\n", 69, "no JSON-RPC 2.0"),
        (b'{"jsonrpc":"2.0","id":1,"result":7}\n', 69, "expected an object"),
    ],
)
def test_a_service_that_is_none_of_ours(
    answer: bytes, code: int, words: str, tmp_path: Path, capsys: Output
) -> None:
    path = tmp_path / "odd.sock"
    done = threading.Event()
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(path))
        listener.listen()

        def serve() -> None:
            peer, _ = listener.accept()
            with peer:
                peer.recv(65536)
                peer.sendall(answer)
                done.wait()

        thread = threading.Thread(target=serve)
        thread.start()
        try:
            assert main(["state", "--socket", str(path), "--timeout", "0.2"]) == code
        finally:
            done.set()
            thread.join()
    assert words in last_line(capsys)


def broken(tmp_path: Path, kind: str) -> str:
    path = tmp_path / "it.yaml"
    if kind == "directory":
        path.mkdir()
    elif kind == "binary":
        path.write_bytes(bytes(range(256)))
    elif kind == "no yaml":
        path.write_text("legs: [\n")
    elif kind == "empty":
        path.write_text("")
    elif kind == "unknown key":
        path.write_text("lgs: 3\nsteps: 3\n")
    return str(path)


KINDS = {
    "missing": "no such file",
    "directory": "a directory",
    "binary": "byte 0x80",
    "no yaml": "YAML",
    "empty": "an empty file",
    "unknown key": "unknown key",
}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(
    "words", [["check"], ["check", "--quick"], ["run"], ["route", "--check"]], ids=" ".join
)
def test_a_file_that_cannot_be_used_is_78_with_its_place(
    words: list[str], kind: str, tmp_path: Path, capsys: Output
) -> None:
    assert main([*words, broken(tmp_path, kind)]) == 78
    told = capsys.readouterr()
    assert told.out == ""
    assert KINDS[kind] in told.err
    assert f"{tmp_path}/it.yaml" in told.err
    assert "Traceback" not in told.err
    assert all(line.startswith("hobnail: ") for line in told.err.splitlines())


def test_every_problem_of_a_configuration_is_told_at_once(tmp_path: Path, capsys: Output) -> None:
    text = (CONFIG / "juniper.yaml").read_text()
    bad = text.replace("period_ms: 10 ", "period_ms: fast ").replace("nominal_v: 6.0", "nominal_v: 600")
    path = tmp_path / "bad.yaml"
    path.write_text(bad)
    assert main(["check", str(path)]) == 78
    err = capsys.readouterr().err
    assert "2 to mend" in err
    assert "period_ms: found fast; allowed: a number from 2 to 50 ms" in err
    assert "supply.nominal_v: found 600 V" in err


def test_run_with_a_route_that_does_not_fit_the_robot_starts_nothing(tmp_path: Path, capsys: Output) -> None:
    path = tmp_path / "route.yaml"
    path.write_text("steps:\n  - gait: gallop\n")
    sock = tmp_path / "s" / "hobnail.sock"
    assert main(["run", JUNIPER, "--route", str(path), "--socket", str(sock)]) == 78
    assert f"{path}:2:11: steps[0].gait: found gait gallop" in last_line(capsys)
    assert not sock.parent.exists()


def test_run_with_a_driver_that_does_not_exist(tmp_path: Path, capsys: Output) -> None:
    words = ["run", JUNIPER, "--driver", "abacus", "--socket", str(tmp_path / "hobnail.sock")]
    assert main(words) == 69
    line = last_line(capsys)
    assert "abacus" in line
    assert "simulated" in line  # what there is


def test_run_where_nothing_can_be_written(tmp_path: Path, capsys: Output) -> None:
    (tmp_path / "file").write_text("")
    code = main(["run", JUNIPER, "--socket", str(tmp_path / "file" / "hobnail.sock")])
    assert code in (66, 69, 77)
    assert str(tmp_path / "file") in last_line(capsys)


def test_a_missing_file_as_a_process_of_its_own(tmp_path: Path) -> None:
    done = hobnail("run", str(tmp_path / "none.yaml"))
    assert done.returncode == 78
    assert done.stdout == ""
    assert done.stderr.startswith("hobnail: ")
    assert "no such file" in done.stderr
    assert "Traceback" not in done.stderr
