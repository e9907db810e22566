"""`hobnail calibrate`: scripted through a pipe, interrupted, and everything that is no session."""

from __future__ import annotations

import io
import json
import math
import os
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from command_line import hobnail, subprocess_environment
from fast_service import FastService
from hobnail.cli import calibrate
from hobnail.cli.main import main
from hobnail.config import load_robot
from hobnail.config.calibration import calibration_path
from hobnail.errors import ServiceError
from hobnail.robot import Robot
from hobnail.service import drivers, socket_file
from hobnail_drivers.chip_file import open_chip_file
from hobnail_drivers.pca9685_chip import Chip
from robots import CONFIG, examples
from workshop.technician import BenchRobot, exact_servos

Output = pytest.CaptureFixture[str]
Answer = Callable[[str], None]
TIMEOUT_S = 120.0  # for a machine that is busy; nothing here is about speed


@pytest.fixture
def config(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    """juniper in a folder of its own, its socket beside it."""
    path = tmp_path / "juniper.yaml"
    path.write_bytes((CONFIG / "juniper.yaml").read_bytes())
    monkeypatch.setenv("HOBNAIL_SOCKET", str(tmp_path / "run" / "hobnail.sock"))
    monkeypatch.setenv("USER", "bench")
    monkeypatch.setenv("LOGNAME", "bench")
    return str(path)


@pytest.fixture
def bench(config: str, monkeypatch: pytest.MonkeyPatch) -> BenchRobot:
    """The robot on simulated time."""
    robot = BenchRobot(exact_servos(load_robot(config)), {})
    monkeypatch.setattr(drivers, "open_driver", lambda _name, _robot: robot.driver)
    monkeypatch.setattr(calibrate, "sleep", robot.sleep)
    return robot


@pytest.fixture
def answer(monkeypatch: pytest.MonkeyPatch) -> Answer:
    """What comes through the pipe."""

    def set_input(text: str) -> None:
        monkeypatch.setattr(
            sys, "stdin", io.TextIOWrapper(io.BytesIO(text.encode("utf-8", "surrogateescape")))
        )

    return set_input


def robot_of(config: str) -> Robot:
    return load_robot(config)


ROLL = "left-front.roll"


def test_a_session_through_a_pipe(config: str, bench: BenchRobot, answer: Answer, capsys: Output) -> None:
    answer("yes\nyes\noutward\nyes\n-2\nok\nyes\nskip\nskip\n")
    assert main(["calibrate", config, "--joint", ROLL]) == 0
    told = capsys.readouterr()
    assert told.err == ""
    assert "One joint at a time gets pulses" in told.out
    assert "a model: nothing moves in the room" in told.out
    assert "Ready? [yes/no/skip/quit] yes\n" in told.out  # a record that can be read afterwards
    assert f"2 values kept, in {calibration_path(config)}" in told.out
    assert f"Next: `hobnail check {config}`" in told.out
    (roll, *others) = robot_of(config).joints
    assert math.degrees(roll.trim_rad) == pytest.approx(-2.0, abs=0.2)
    assert all(joint.trim_rad == 0.0 for joint in others)
    assert bench.awake == []
    assert max(len(line) for line in told.out.splitlines() if str(Path(config).parent) not in line) <= 100


def test_what_is_known_of_a_joint_is_told_before_it(
    config: str, bench: BenchRobot, answer: Answer, capsys: Output
) -> None:
    main(["calibrate", config, "--joint", ROLL, "--set", "trim_deg=1.5", "--who", "gardener"])
    answer("yes\nno\n")
    assert main(["calibrate", config, "--joint", ROLL]) == 0
    out = capsys.readouterr().out
    assert "trim 1.5 (" in out
    assert ", today, gardener)" in out
    assert "never measured: direction, map, limits" in out
    assert bench.driver.writes == 0  # `no` to its first pulse


def test_answers_that_end_are_65_and_what_was_kept_stays(
    config: str, bench: BenchRobot, answer: Answer, capsys: Output
) -> None:
    answer("yes\nyes\noutward\n")
    assert main(["calibrate", config, "--joint", ROLL]) == 65
    told = capsys.readouterr()
    assert told.err == "hobnail: the answers ended before the questions did; what was kept stays kept\n"
    assert bench.awake == []
    assert "left-front.roll: {direction: 1}" in calibration_path(config).read_text()


@given(
    st.binary(max_size=200)
    | st.lists(st.sampled_from([b"yes", b"+", b"ok", b"is 3", b"\xff\xfe", b"x" * 3000])).map(b"\n".join)
)
@examples(15)
def test_whatever_comes_through_the_pipe_nothing_breaks(
    tmp_path_factory: pytest.TempPathFactory, data: bytes
) -> None:
    folder = tmp_path_factory.mktemp("pipe")
    config = folder / "juniper.yaml"
    config.write_bytes((CONFIG / "juniper.yaml").read_bytes())
    robot = BenchRobot(exact_servos(load_robot(config)), {})
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(drivers, "open_driver", lambda _name, _robot: robot.driver)
        patch.setattr(calibrate, "sleep", robot.sleep)
        patch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(b"yes\nyes\n" + data)))
        errors = io.StringIO()
        patch.setattr(sys, "stderr", errors)
        words = ["calibrate", str(config), "--joint", ROLL, "--socket", str(folder / "run" / "h.sock")]
        assert main(words) in (0, 65)
    assert "internal error" not in errors.getvalue()
    assert robot.awake == []
    load_robot(config)


def test_steps_legs_and_joints_are_chosen(
    config: str, bench: BenchRobot, answer: Answer, capsys: Output
) -> None:
    answer("yes\n" + "yes\nskip\n" * 4)
    words = ["calibrate", config, "--leg", "right-hind", "--joint", ROLL, "--step", "trim"]
    assert main(words) == 0
    out = capsys.readouterr().out
    assert "4 joints to calibrate" in out
    for number, name in enumerate((ROLL, "right-hind.roll", "right-hind.hip", "right-hind.knee"), start=1):
        assert f"{name}, {number} of 4" in out
    assert "Direction." not in out
    assert bench.awake == []


def test_interrupted_from_the_keyboard_the_pulses_end(
    config: str, bench: BenchRobot, answer: Answer, monkeypatch: pytest.MonkeyPatch, capsys: Output
) -> None:
    answer("yes\nyes\noutward\nyes\n+10\n")
    writes = 0

    def sleep(seconds: float) -> None:
        nonlocal writes
        bench.sleep(seconds)
        writes += 1
        if calibration_path(config).exists() and writes > 0:
            assert bench.awake == [ROLL]
            os.kill(os.getpid(), signal.SIGINT)

    monkeypatch.setattr(calibrate, "sleep", sleep)
    before = signal.getsignal(signal.SIGINT)
    assert main(["calibrate", config, "--joint", ROLL]) == 130
    assert "ended, no pulses are sent; 1 value kept, in " in capsys.readouterr().err
    assert bench.awake == []
    assert signal.getsignal(signal.SIGINT) is before


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP])
def test_ended_by_a_signal_the_chip_pulses_no_more(
    config: str, tmp_path: Path, number: signal.Signals
) -> None:
    """The whole program over a chip whose registers outlive it."""
    chip = tmp_path / "chip"
    process = subprocess.Popen(
        [sys.executable, "-m", "hobnail.cli.main", "calibrate", config, "--driver", f"chip-model:{chip}"],
        env=subprocess_environment(),
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    with process:
        try:
            assert process.stdin is not None
            assert process.stdout is not None
            process.stdin.write("yes\nyes\n")
            process.stdin.flush()
            seen = ""
            while "Which way" not in seen:
                got = process.stdout.read(1)
                assert got, seen
                seen += got
            (entry,) = open_chip_file(str(chip))
            assert not Chip(registers=entry.registers).is_full_off()
            process.send_signal(number)
            assert process.wait(TIMEOUT_S) == 128 + number
            assert Chip(registers=entry.registers).is_full_off()
        finally:
            process.kill()
    assert not calibration_path(config).exists()


def test_the_service_holds_the_robot(config: str, answer: Answer, bench: BenchRobot, capsys: Output) -> None:
    answer("yes\n")
    path = socket_file.default_path()
    with socket_file.listen(path):
        assert main(["calibrate", config]) == 69
    err = capsys.readouterr().err
    assert f"service answers on {path}, and two programs must not drive the servos" in err
    assert "systemctl stop hobnail" in err
    assert bench.driver.writes == 0


def test_a_service_elsewhere_that_drives_this_robot_holds_it_too(
    config: str,
    answer: Answer,
    bench: BenchRobot,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: Output,
) -> None:
    """The system's, while $HOBNAIL_SOCKET says otherwise; that of another robot is left alone."""
    answer("yes\nno\n")
    with FastService(tmp_path) as running:
        monkeypatch.setattr(socket_file, "SYSTEM_PATH", running.path)
        assert main(["calibrate", config, "--joint", ROLL]) == 69
        assert "a service drives juniper already" in capsys.readouterr().err
        other = Path(config).read_text().replace("name: juniper", "name: sorrel")
        Path(config).write_text(other)
        assert main(["calibrate", config, "--joint", ROLL]) == 0
    assert bench.driver.writes == 0


def test_with_no_input_at_all_it_ends(
    config: str, bench: BenchRobot, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "stdin", None)  # as it is when descriptor 0 is closed
    assert main(["calibrate", config, "--joint", ROLL]) == 65
    assert bench.awake == []


def test_while_it_calibrates_no_service_starts_and_nobody_else_calibrates(
    config: str, bench: BenchRobot, answer: Answer, monkeypatch: pytest.MonkeyPatch
) -> None:
    answer("yes\nyes\nskip\n")
    refusals = []

    def sleep(_: float) -> None:
        try:
            socket_file.listen(socket_file.default_path())
        except ServiceError as error:
            refusals.append(str(error))

    monkeypatch.setattr(calibrate, "sleep", sleep)
    assert main(["calibrate", config, "--joint", ROLL, "--step", "trim"]) == 0
    assert refusals
    assert all("calibrating a robot" in text for text in refusals)
    assert bench.awake == []
    socket_file.listen(socket_file.default_path()).close()


def test_the_clock_on_the_bench(config: str, bench: BenchRobot, answer: Answer, capsys: Output) -> None:
    answer("yes\n310.2\nyes\n")
    assert main(["calibrate", config, "--clock", "main"]) == 0
    assert robot_of(config).boards[0].oscillator_hz == pytest.approx(310.2 * 4096 * 20, abs=1)
    assert "1 value kept" in capsys.readouterr().out
    woken = {k for frame in bench.driver.transitions for k, pulse in enumerate(frame.pulses_us) if pulse}
    assert woken == {0}


# --- without a session -----------------------------------------------------------


def test_a_clock_measured_already_drives_nothing(config: str, capsys: Output) -> None:
    assert main(["calibrate", config, "--clock", "main", "--measured-hz", "310.2"]) == 0
    assert "kept for main: a clock of 25.4116 MHz" in capsys.readouterr().out
    assert robot_of(config).boards[0].oscillator_hz == pytest.approx(25.4116e6, rel=1e-5)
    # Set up for that clock, the chip has another prescale: the old rate must not be taken for a new one.
    assert main(["calibrate", config, "--clock", "main", "--measured-hz", "310.2"]) == 64
    assert "310.2 Hz is what board main had at prescale 19; set up as it is now" in capsys.readouterr().err
    assert main(["calibrate", config, "--clock", "main", "--measured-hz", "295.6"]) == 0
    assert robot_of(config).boards[0].oscillator_hz == pytest.approx(295.6 * 4096 * 21, abs=1)
    assert main(["calibrate", config, "--clock", "main", "--measured-hz", "50"]) == 64
    assert "a chip with a clock of 23 to 27 MHz has" in capsys.readouterr().err


def test_values_are_set_shown_and_taken_back(config: str, capsys: Output) -> None:
    words = ["calibrate", config]
    assert main([*words, "--show"]) == 0
    assert "never calibrated: any joint" in capsys.readouterr().out
    assert main([*words, "--joint", "left-front.knee", "--set", "trim_deg=-3.5", "--who", "gardener"]) == 0
    assert main([*words, "--board", "main", "--set", "oscillator_mhz=25.3"]) == 0
    capsys.readouterr()
    assert main([*words, "--show", "--json"]) == 0
    shown: dict[str, Any] = json.loads(capsys.readouterr().out)
    assert shown["robot"] == "juniper"
    (knee, board) = shown["measured"]
    assert (knee["part"], knee["key"], knee["value"], knee["who"], knee["days"], knee["stale"]) == (
        "left-front.knee", "trim_deg", "-3.5", "gardener", 0, False,
    )  # fmt: skip
    assert (board["part"], board["value"]) == ("main", "25.3")
    assert len(shown["never_calibrated"]) == 11
    assert len(shown["history"]) == 2
    assert main([*words, "--show"]) == 0
    out = capsys.readouterr().out
    assert "left-front.knee trim_deg: 0 -> -3.5, by gardener" in out
    assert "never calibrated: left-front.roll, left-front.hip, right-front.roll" in out
    assert main([*words, "--undo"]) == 0
    assert "undo: main oscillator_mhz: 25.3 -> 25" in capsys.readouterr().out
    assert main([*words, "--undo", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["measured"] == []
    assert main([*words, "--undo"]) == 64
    assert "nothing to undo" in capsys.readouterr().err


def test_a_value_with_which_the_robot_cannot_stand_is_told_and_can_be_taken_back(
    config: str, capsys: Output
) -> None:
    words = ["calibrate", config, "--joint", "left-front.knee", "--set", "pulse_limits_us=[700, 1000]"]
    assert main(words) == 78
    err = capsys.readouterr().err
    assert "the robot cannot be used with it" in err
    assert "--undo" in err
    assert main(["calibrate", config, "--undo"]) == 0
    load_robot(config)


@pytest.mark.parametrize(
    ("words", "code", "told"),
    [
        (["--show", "--undo"], 64, "--show and --undo do not go together"),
        (["--set", "trim_deg=1"], 64, "--set goes with one --joint or one --board"),
        (["--set", "trim_deg=1", "--joint", ROLL, "--joint", "left-front.hip"], 64, "with one --joint"),
        (["--board", "main"], 64, "--board goes with --set"),
        (["--measured-hz", "50"], 64, "--measured-hz goes with --clock"),
        (["--json"], 64, "--json goes with --show"),
        (["--clock", "main", "--json"], 64, "--json goes with --show"),
        (["--joint", "left-front.toe"], 64, "--joint is 'left-front.toe'; allowed: left-front.roll"),
        (["--leg", "left-frnt"], 64, "Did you mean left-front?"),
        (["--clock", "mian"], 64, "Did you mean main?"),
        (["--joint", "x", "--set", "trim_deg=1"], 64, "--joint is 'x'"),
        (["--joint", ROLL, "--set", "trim_deg=99"], 78, "--set:1:11: trim_deg: found 99 deg; allowed"),
        (["--joint", ROLL, "--set", "trim_deg"], 64, "--set is 'trim_deg'; allowed: KEY=VALUE"),
        (["--step", "dance"], 64, "--step"),
        (["--teeth", "9"], 64, "--teeth is '9', allowed a whole number, 10 to 60"),
        (["--points", "x"], 64, "--points is 'x'"),
        (["--margin-us", "-1"], 64, "--margin-us is '-1'"),
        (["--who", "a\tb", "--show"], 64, "--who is"),
        (["--driver", "nothing"], 69, "there is no driver 'nothing'; there are: "),
        (["--clock", "main", "--measured-hz", "nan"], 64, "--measured-hz is 'nan'"),
    ],
)
def test_wrong_usage_says_what_is_allowed(
    config: str, words: list[str], code: int, told: str, capsys: Output, answer: Answer
) -> None:
    answer("")
    assert main(["calibrate", config, *words]) == code
    err = capsys.readouterr().err
    assert told in err
    assert "internal error" not in err
    assert not calibration_path(config).exists()


def test_files_that_cannot_be_used(config: str, capsys: Output, monkeypatch: pytest.MonkeyPatch) -> None:
    assert main(["calibrate", f"{config}.gone", "--show"]) == 78
    calibration_path(config).write_text("version: 1\nrobot: other\nhistory: []\n")
    assert main(["calibrate", config, "--show"]) == 78
    assert "measured on another robot" in capsys.readouterr().err
    calibration_path(config).unlink()
    monkeypatch.setattr("os.access", lambda *_: False)
    assert main(["calibrate", config, "--undo"]) == 78
    assert "ask for the right, or be another user" in capsys.readouterr().err


def test_a_login_that_nobody_has_is_unknown(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("getpass.getuser", lambda: "b\ten\x00ch")
    assert calibrate.login() == "bench"

    def none() -> str:
        raise KeyError("uid not found")

    monkeypatch.setattr("getpass.getuser", none)
    assert calibrate.login() == "unknown"


def test_as_a_process_it_shows_what_is_there(config: str) -> None:
    done = hobnail("calibrate", config, "--show")
    assert done.returncode == 0
    assert "never calibrated: any joint" in done.stdout
