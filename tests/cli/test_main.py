"""The `hobnail` command itself: help, usage, every way to end, and that it stays light."""

from __future__ import annotations

import os
import subprocess
import sys
from importlib import import_module
from pathlib import Path

import pytest

from command_line import hobnail, subprocess_environment
from hobnail.cli import main as main_module
from hobnail.cli.main import COMMANDS, command, main
from hobnail.errors import CommanderError, ConfigError, HobnailError, Problem, StateError

NAMES = list(COMMANDS)


@pytest.mark.parametrize("words", [["--help"], ["-h"], ["help"]])
def test_help_lists_every_command(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(words) == 0
    out = capsys.readouterr().out
    for name, text in COMMANDS.items():
        assert f"{name} " in out
        assert text in out


def test_without_a_command_the_help_is_shown_and_usage_is_wrong(capsys: pytest.CaptureFixture[str]) -> None:
    assert main([]) == 64
    assert "commands:" in capsys.readouterr().out


@pytest.mark.parametrize("name", NAMES)
def test_every_command_has_a_module_and_a_help_with_an_example(
    name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    module = import_module(f"hobnail.cli.{name}")
    assert module.__doc__
    for words in ([name, "--help"], ["help", name]):
        assert main(words) == 0
        out = capsys.readouterr().out
        assert out.startswith(f"usage: hobnail {name}")
        assert "examples:" in out
        assert f"  hobnail {name}" in out
        assert max(map(len, out.splitlines())) <= 110


@pytest.mark.parametrize("name", NAMES)
def test_every_option_is_explained(name: str) -> None:
    _, parser = command(name)
    for action in parser._actions:
        assert action.help, action


def test_the_version_is_told(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--version"]) == 0
    assert capsys.readouterr().out.startswith("hobnail ")


def test_a_misspelt_command_is_refused_with_the_nearest(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["wlak"]) == 64
    assert capsys.readouterr().err == "hobnail: there is no command 'wlak'; did you mean 'walk'?\n"
    assert main(["qqqq"]) == 64
    assert "`hobnail --help` lists them" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["walk", "--vx", "fast"], "--vx is 'fast', allowed a number of m/s"),
        (["walk", "--vx", "nan"], "--vx is 'nan'"),
        (["walk", "--vx", "-inf"], "--vx is '-inf'"),
        (["walk", "--vx", "0.1", "--for", "0"], "--for is '0', allowed a number of seconds above 0"),
        (["walk", "--vx", "0.1", "--for", "-1"], "--for is '-1'"),
        (["walk", "--vx", "0.1", "--pivot", "1"], "--pivot: expected 2 arguments"),
        (["walk"], "nothing to do: give --vx, --vy or --yaw-rate"),
        (["watch", "--rate", "500"], "--rate is '500', allowed 0.1 to 50 Hz"),
        (["stop", "--no"], "unrecognized arguments: --no"),  # half typed --now
        (["stop", "now"], "unrecognized arguments: now"),
        (["run"], "the following arguments are required: CONFIG"),
        (["route"], "give either a FILE or --cancel"),
        (["route", "x.yaml", "--cancel"], "give either a FILE or --cancel"),
        (["state", "--timeout", "soon"], "--timeout is 'soon'"),
        (["check"], "the following arguments are required: CONFIG"),
    ],
)
def test_wrong_usage_ends_with_64_and_says_what_is_allowed(
    words: list[str], told: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(words) == 64
    err = capsys.readouterr().err
    assert told in err
    assert "Traceback" not in err
    assert len(err.splitlines()) == 1


@pytest.mark.parametrize("text", ["-0.1", "-1e-2", "-.5"])
def test_negative_numbers_in_any_notation_are_no_options(text: str) -> None:
    _, parser = command("walk")
    assert parser.parse_args(["--vx", text]).vx == float(text)


def fails_with(error: BaseException, monkeypatch: pytest.MonkeyPatch) -> int:
    def fail(_words: list[str]) -> int:
        raise error

    monkeypatch.setattr(main_module, "_dispatch", fail)
    return main(["state"])


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (StateError("not now"), 75),
        (CommanderError("client 3 commands the robot"), 75),
        (ConfigError([Problem("a.yaml", 1, 2, "legs", "3", "4"), Problem("a.yaml", 2, 1, "", "x", "y")]), 78),
        (HobnailError("odd"), 70),
        (PermissionError(13, "Permission denied", "/var/lib/x"), 77),
        (IsADirectoryError(21, "Is a directory", "/tmp"), 66),
        (KeyboardInterrupt(), 130),
    ],
)
def test_every_error_is_a_line_and_its_exit_code(
    error: BaseException, code: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert fails_with(error, monkeypatch) == code
    err = capsys.readouterr().err
    assert "Traceback" not in err
    assert all(line.startswith("hobnail: ") for line in err.splitlines())
    if isinstance(error, HobnailError):
        assert [line.removeprefix("hobnail: ") for line in err.splitlines()] == str(error).splitlines()


def test_what_nobody_thought_of_is_one_line_and_70(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.delenv("HOBNAIL_DEBUG", raising=False)
    assert fails_with(ZeroDivisionError("division by zero"), monkeypatch) == 70
    err = capsys.readouterr().err
    assert err.startswith("hobnail: internal error: ZeroDivisionError: division by zero; this is a bug")
    assert len(err.splitlines()) == 1


def test_the_traceback_is_there_for_who_asks(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("HOBNAIL_DEBUG", "1")
    assert fails_with(ZeroDivisionError(), monkeypatch) == 70
    assert "Traceback" in capsys.readouterr().err


def test_the_stop_command_loads_neither_numpy_nor_yaml(tmp_path: Path) -> None:
    # They are most of the time that a start takes, and a stop is wanted at once.
    code = (
        "import sys; from hobnail.cli.main import main; code = main(sys.argv[1:]); "
        "print(code, sorted({'numpy', 'yaml', 'asyncio'} & set(sys.modules)))"
    )
    words = [sys.executable, "-c", code, "stop", "--socket", str(tmp_path / "none.sock")]
    done = subprocess.run(words, env=subprocess_environment(), capture_output=True, text=True, check=False)
    assert done.stdout == "69 []\n"
    assert "NOT STOPPED" in done.stderr


def test_as_a_process_the_exit_code_arrives_and_a_closed_pipe_is_quiet() -> None:
    assert hobnail("wlak").returncode == 64
    shell = f"{sys.executable} -m hobnail.cli.main --help | true; echo ${{PIPESTATUS[0]}}"
    done = subprocess.run(
        ["bash", "-c", shell], env=subprocess_environment(), capture_output=True, text=True, check=False
    )
    assert done.stdout.strip() in ("0", "141")  # 0: it all went into the pipe before that closed
    assert done.stderr == ""


def test_a_reader_that_leaves_ends_the_command_with_141(
    monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(os, "dup2", lambda *_: None)  # it would close the tests' own stdout
    assert fails_with(BrokenPipeError(32, "Broken pipe"), monkeypatch) == 141
    assert capfd.readouterr().err == ""
