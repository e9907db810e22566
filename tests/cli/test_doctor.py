"""`hobnail doctor` on this machine, with a real service, a stale socket, one that hangs, and wrong files."""

from __future__ import annotations

import json
import socket
from pathlib import Path
from typing import Any

import pytest

from command_line import hobnail_on_a_terminal
from fast_service import FastService
from hobnail.cli.doctor import exit_code
from hobnail.cli.main import main
from hobnail.workshop.doctor import world
from hobnail.workshop.doctor.findings import fine, mend, note
from robots import CONFIG

Output = pytest.CaptureFixture[str]
JUNIPER = str(CONFIG / "juniper.yaml")
UNIT = ["--unit", "hobnail-not-there"]


@pytest.fixture(autouse=True)
def nobody_else(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """No service of this machine is looked at."""
    monkeypatch.setenv("HOBNAIL_SOCKET", str(tmp_path / "hobnail.sock"))


def found(words: list[str], output: Output, code: int) -> dict[str, list[dict[str, Any]]]:
    """What `--json` tells, by subject."""
    assert main(["doctor", *UNIT, *words, "--json"]) == code
    told = json.loads(output.readouterr().out)
    assert told["exit_code"] == code
    assert told["ok"] == (code == 0)
    by_subject: dict[str, list[dict[str, Any]]] = {}
    for finding in told["findings"]:
        assert set(finding) == {"subject", "grade", "text", "next"}
        assert finding["next"] or finding["grade"] != "mend"
        by_subject.setdefault(finding["subject"], []).append(finding)
    return by_subject


def test_a_machine_without_hardware_needs_no_mending(capsys: Output) -> None:
    assert main(["doctor", *UNIT, JUNIPER]) == 0
    out = capsys.readouterr().out
    assert "ok   configuration " in out
    assert "a model, no hardware is needed" in out
    assert out.splitlines()[-1].startswith("nothing to mend, ")


def test_a_running_service_is_asked_and_goes_on(tmp_path: Path, capsys: Output) -> None:
    with FastService(tmp_path) as service:
        told = found(["--driver", "simulated"], capsys, 0)
        assert "juniper is off, nobody commands it" in told["socket"][0]["text"]
        assert told["configuration"][0]["text"].startswith(str(service.robot.source))
        service.machine.stop(0, "smoke", service.now_s)
        told = found(["--driver", "simulated"], capsys, 69)
        assert told["stop"][0]["text"] == "category 0, latched: smoke"
        assert service.machine.state == "stopped"


def test_a_stale_socket_is_worth_knowing(tmp_path: Path, capsys: Output) -> None:
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as listener:
        listener.bind(str(tmp_path / "hobnail.sock"))
    told = found([JUNIPER], capsys, 0)
    assert told["socket"][0]["grade"] == "note"
    assert "is stale" in told["socket"][0]["text"]


def test_a_service_that_hangs_does_not_hang_it(
    tmp_path: Path, capsys: Output, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(world, "ASK_S", 0.05)
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as listener:
        listener.bind(str(tmp_path / "hobnail.sock"))
        listener.listen()
        told = found([JUNIPER], capsys, 69)
    assert told["socket"][0]["grade"] == "mend"
    assert "hangs" in told["socket"][0]["text"]


def test_something_else_on_the_socket_is_told(tmp_path: Path, capsys: Output) -> None:
    import threading

    def babble(listener: socket.socket) -> None:
        peer, _ = listener.accept()
        with peer:
            peer.sendall(b"220 hello\r\n")
            peer.recv(1000)

    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as listener:
        listener.bind(str(tmp_path / "hobnail.sock"))
        listener.listen()
        thread = threading.Thread(target=babble, args=(listener,))
        thread.start()
        told = found([JUNIPER], capsys, 69)
        thread.join()
    assert "no JSON-RPC" in told["socket"][0]["text"]


def test_a_wrong_configuration_has_its_own_exit_code(tmp_path: Path, capsys: Output) -> None:
    path = tmp_path / "robot.yaml"
    path.write_text((CONFIG / "juniper.yaml").read_text().replace("period_ms:", "perod_ms:"))
    told = found([str(path)], capsys, 78)
    assert any("perod_ms" in each["text"] for each in told["configuration"])
    assert found([str(tmp_path / "none.yaml")], capsys, 78)["configuration"][0]["grade"] == "mend"


def test_an_unknown_driver_is_told_with_those_that_there_are(capsys: Output) -> None:
    told = found([JUNIPER, "--driver", "pca"], capsys, 69)
    assert "there is no driver 'pca'; there are:" in told["driver"][0]["text"]


def test_a_model_in_a_file_is_not_made(tmp_path: Path, capsys: Output) -> None:
    path = tmp_path / "chips.bin"
    found([JUNIPER, "--driver", f"chip-model:{path}"], capsys, 0)
    assert not path.exists()


def test_a_bus_that_is_not_there_is_to_be_mended(tmp_path: Path, capsys: Output) -> None:
    config = tmp_path / "robot.yaml"
    text = (CONFIG / "juniper.yaml").read_text()
    assert "bus: 1" in text
    config.write_text(text.replace("bus: 1", "bus: 57"))
    told = found([str(config), "--driver", "pca9685"], capsys, 69)
    assert told["bus"][0]["text"].startswith("/dev/i2c-57: No such file")
    assert "opening the bus failed" in told["boards"][0]["text"]


@pytest.mark.parametrize("name", ["", "-H", "../x", "a b", "a/b"])
def test_a_unit_that_is_none_is_refused(name: str, capsys: Output) -> None:
    assert main(["doctor", f"--unit={name}"]) == 64
    assert f"--unit is {name!r}, allowed a unit such as" in capsys.readouterr().err


def test_exit_codes() -> None:
    assert exit_code([fine("a", "b"), note("a", "b")]) == 0
    assert exit_code([mend("bus", "a", "b")]) == 69
    assert exit_code([mend("bus", "a", "b"), mend("configuration", "a", "b")]) == 78


def test_it_fits_eighty_columns_on_a_terminal() -> None:
    code, shown = hobnail_on_a_terminal("doctor", *UNIT, JUNIPER, "--driver", "pca9685")
    assert code in (0, 69)  # 0 on a machine that has such a board
    assert max(map(len, shown.splitlines())) < 80
    assert "\x1b" not in shown
