"""`hobnail trim`: typed, asked for, walked by a running robot; shown, forgotten, refused."""

from __future__ import annotations

import io
import json
import math
import sys
from collections.abc import Callable, Iterator
from functools import partial
from pathlib import Path
from typing import Any

import pytest

from fast_service import FastService
from hobnail.cli import measured_walk, waiting, walk
from hobnail.cli.dialogue import Dialogue
from hobnail.cli.main import main
from hobnail.config import digest_on_disk, load_robot
from hobnail.config.calibration import calibration_path
from hobnail.workshop.calibrate.effects import Ask
from robots import CONFIG

Output = pytest.CaptureFixture[str]
Answer = Callable[[str], None]


@pytest.fixture
def config(tmp_path: Path) -> str:
    path = tmp_path / "juniper.yaml"
    path.write_bytes((CONFIG / "juniper.yaml").read_bytes())
    return str(path)


@pytest.fixture
def answer(monkeypatch: pytest.MonkeyPatch) -> Answer:
    """What comes through the pipe."""
    return lambda text: monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(text.encode())))


def test_a_typed_walk_is_kept_and_shown(config: str, capsys: Output) -> None:
    words = ["trim", config, "--ahead", "2000", "--measured", "1880", "0", "0", "--who", "gardener"]
    assert main(words) == 0
    out = capsys.readouterr().out
    assert "a metre ahead by the feet: +940 mm ahead, +0 mm left, +0.0 deg (" in out
    assert "today, gardener)" in out
    assert "start the service again" in out
    assert load_robot(config).walk.ahead == pytest.approx((0.94, 0.0, 0.0))
    assert main(["trim", config, "--turn", "-720", "--measured", "-693"]) == 0
    assert load_robot(config).walk.turn == pytest.approx(0.9625)
    assert main(["trim", config, "--sideways", "1000", "--measured", "0", "930", "0"]) == 0
    capsys.readouterr()
    assert main(["trim", config, "--show", "--json"]) == 0
    shown: dict[str, Any] = json.loads(capsys.readouterr().out)
    assert shown["ahead_mm_mm_deg"] == [940.0, 0.0, 0.0]
    assert shown["sideways_mm_mm_deg"] == [0.0, 930.0, 0.0]
    assert shown["turn_deg"] == 346.5
    assert set(shown["measured"]) == {"ahead_mm_mm_deg", "sideways_mm_mm_deg", "turn_deg"}


def test_a_second_walk_composes_with_the_first(config: str) -> None:
    """Trimmed to 0.94, it says 2000 mm and goes 2040: a metre by the feet is 0.94 * 1.02."""
    main(["trim", config, "--ahead", "2000", "--measured", "1880", "0", "0"])
    assert main(["trim", config, "--ahead", "2000", "--measured", "2040", "0", "0"]) == 0
    assert load_robot(config).walk.ahead[0] == pytest.approx(0.94 * 1.02, abs=1e-6)


def test_walks_are_forgotten_and_that_is_taken_back(config: str, capsys: Output) -> None:
    main(["trim", config, "--turn", "720", "--measured", "693"])
    capsys.readouterr()
    assert main(["trim", config, "--reset"]) == 0
    assert "a full turn by the feet: 360.0 deg (never measured)" in capsys.readouterr().out
    assert load_robot(config).walk.turn == 1.0
    assert main(["trim", config, "--reset"]) == 64
    assert "nothing to reset" in capsys.readouterr().err
    assert main(["calibrate", config, "--undo"]) == 0
    assert load_robot(config).walk.turn == pytest.approx(0.9625)


def test_asked_for_through_a_pipe(config: str, answer: Answer, capsys: Output) -> None:
    answer("dance\nah\nfar\n2000\n1880 50\n1880, 50, -3\n")
    assert main(["trim", config]) == 0
    out = capsys.readouterr().out
    assert "'dance' is no walk; allowed: ahead, sideways, turn" in out
    assert "'far': wanted 1 number, as in: 693" in out
    assert "'1880 50': wanted 3 numbers, as in: 1880 50 -3" in out
    assert "Mark the floor under the middle of the body" in out
    assert load_robot(config).walk.ahead[0] < 0.95


@pytest.mark.parametrize("length", range(4))
def test_answers_that_end_anywhere_keep_nothing(
    config: str, answer: Answer, length: int, capsys: Output
) -> None:
    answer("".join(["turn\n", "720\n", "693\n"][:length]))
    assert main(["trim", config]) == (0 if length == 3 else 65)
    assert calibration_path(config).exists() == (length == 3)
    assert "internal error" not in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--ahead", "2000", "--turn", "360"], "--ahead and --turn are two walks"),
        (["--show", "--reset"], "do not go together"),
        (["--show", "--ahead", "2000"], "stand alone"),
        (["--measured", "1"], "give what was walked"),
        (["--walk"], "give what was walked"),
        (["--walk", "--ahead", "2000", "--measured", "1", "2", "3"], "leave --measured out"),
        (["--ahead", "2000", "--measured", "1900", "20"], "three numbers: mm ahead, mm left, degrees"),
        (["--turn", "360", "--measured", "1900", "20", "3"], "one number, the degrees"),
        (["--ahead", "far"], "--ahead is 'far', allowed -100000 to 100000 mm"),
        (
            ["--ahead", "300", "--measured", "300", "0", "0"],
            "the way ahead is 300 mm; allowed: 500 mm or",
        ),
        (["--ahead", "300", "--walk"], "the way ahead is 300 mm; allowed: 500 mm or"),
        (["--ahead", "2000", "--measured", "1000", "0", "0"], "a trim allows 700 to 1400 mm"),
        (["--turn", "30", "--measured", "30"], "the turn is 30 deg; allowed: 90 deg or more"),
        (["--turn", "360", "--measured", "0"], "by this walk, for a full turn by the feet"),
        (["--ahead", "2000", "--measured", "0", "0", "nan"], "--measured is 'nan'"),
        (["--show", "--who", "\x1b"], "--who is"),
    ],
)
def test_wrong_usage_and_walks_that_no_good_robot_makes(
    config: str, words: list[str], told: str, capsys: Output
) -> None:
    assert main(["trim", config, *words]) == 64
    err = capsys.readouterr().err
    assert told in err
    assert "internal error" not in err
    assert not calibration_path(config).exists()


# --- walked by a running robot ---------------------------------------------------


@pytest.fixture
def service(tmp_path: Path, config: str, monkeypatch: pytest.MonkeyPatch) -> Iterator[FastService]:
    """juniper as the file has it, running by its own time."""
    with FastService(tmp_path) as running:
        monkeypatch.setenv("HOBNAIL_SOCKET", str(running.path))
        by_its_time: dict[str, Any] = {"clock": running.clock, "sleep": running.sleep}
        wait = partial(waiting.wait_for_state, **by_its_time)
        monkeypatch.setattr(waiting, "wait_for_state", wait)
        monkeypatch.setattr(walk, "wait_for_state", wait)
        monkeypatch.setattr(measured_walk, "stream", partial(walk.stream, **by_its_time))
        # It runs the file from the tests' own place, which has the same bytes.
        assert running.robot.digest == digest_on_disk(config)
        yield running


def test_the_running_robot_walks_and_its_odometry_counts(
    config: str, service: FastService, monkeypatch: pytest.MonkeyPatch, capsys: Output
) -> None:
    """The tape says 5 per cent less than the odometry."""
    asked: list[str] = []

    def reply(_: object, question: Ask) -> str:
        asked.append(question.question)
        if question.topic == "walk":
            return "yes"
        x, y, yaw = service.machine.body.tick.pose  # type: ignore[union-attr]
        return f"{950 * x:.3f} {1000 * y:.3f} {math.degrees(yaw):.3f}"

    monkeypatch.setattr(Dialogue, "ask", reply)
    main(["stand"])
    assert main(["trim", config, "--ahead", "1000", "--walk"]) == 0
    assert "It walks now, for about 8 s. Is the way free?" in asked[0]
    assert "By its odometry: +" in capsys.readouterr().out
    found = load_robot(config).walk.ahead
    assert found[0] == pytest.approx(0.95, abs=1e-4)
    assert found[1:] == pytest.approx((0.0, 0.0), abs=1e-4)
    assert service.machine.state == "standing"


def test_a_turn_of_more_than_one_is_counted(
    config: str, service: FastService, monkeypatch: pytest.MonkeyPatch
) -> None:
    def reply(_: object, question: Ask) -> str:
        if question.topic == "walk":
            return "yes"
        return f"{math.degrees(0.97 * service.machine.body.tick.pose[2]):.3f}"  # type: ignore[union-attr]

    monkeypatch.setattr(Dialogue, "ask", reply)
    main(["stand"])
    assert main(["trim", config, "--turn", "600", "--walk"]) == 0
    assert load_robot(config).walk.turn == pytest.approx(0.97, abs=1e-4)


def test_a_robot_that_lies_does_not_walk(config: str, service: FastService, capsys: Output) -> None:
    assert main(["trim", config, "--ahead", "1000", "--walk"]) == 75
    assert "the robot is off, and must be standing: `hobnail stand` first" in capsys.readouterr().err
    assert service.machine.state == "off"


@pytest.mark.usefixtures("service")
def test_a_robot_that_runs_other_files_does_not_walk(config: str, capsys: Output) -> None:
    """Started before the last trim, its odometry would be taken for what it is not."""
    main(["stand"])
    main(["trim", config, "--turn", "720", "--measured", "693"])
    capsys.readouterr()
    assert main(["trim", config, "--ahead", "1000", "--walk"]) == 75
    assert "start it again with these" in capsys.readouterr().err


def test_no_is_no(config: str, service: FastService, answer: Answer, capsys: Output) -> None:
    main(["stand"])
    answer("no\n")
    assert main(["trim", config, "--ahead", "1000", "--walk"]) == 75
    assert "nothing was walked, and nothing kept" in capsys.readouterr().err
    assert service.machine.body.tick.pose[0] == pytest.approx(0.0, abs=1e-6)  # type: ignore[union-attr]


def test_without_a_service_nothing_walks(config: str, tmp_path: Path, answer: Answer, capsys: Output) -> None:
    answer("yes\n")
    words = ["trim", config, "--ahead", "1000", "--walk", "--socket", str(tmp_path / "none.sock")]
    assert main(words) == 69
    assert "internal error" not in capsys.readouterr().err
