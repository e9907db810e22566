"""The fuzz of files, a short run of it; the long one is `python tests/fuzz/fuzz_files.py --count 1000000`."""

from __future__ import annotations

from pathlib import Path

import pytest

from fuzz import fuzz_files
from fuzz.fuzz_files import KINDS, FileFuzz, WrongError, check_problems, check_pulses
from hobnail.controller import Controller
from hobnail.errors import Problem
from robots import juniper


def test_damaged_files_are_refused_in_words_or_walk(tmp_path: Path) -> None:
    fuzz = FileFuzz(tmp_path, seed=3)
    for number in range(1200):
        fuzz.run(number)
    assert fuzz.tally.findings == {}
    # The run would prove little if one outcome were missing.
    assert {kind for kind, outcome in fuzz.tally.outcomes if outcome == "accepted"} == set(KINDS)
    assert {kind for kind, outcome in fuzz.tally.outcomes if outcome == "refused"} == set(KINDS)
    assert fuzz.tally.walked > 30


def test_the_same_seed_gives_the_same_inputs(tmp_path: Path) -> None:
    first, second = (FileFuzz(tmp_path, seed=5) for _ in range(2))
    for number in range(20):
        assert first.input(number)[:3] == second.input(number)[:3]


def test_an_error_of_another_kind_is_a_finding(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    fuzz = FileFuzz(tmp_path, seed=3, keep=tmp_path / "kept")

    def broken(_: Path) -> None:
        raise KeyError("duty")

    monkeypatch.setattr(fuzz_files, "load_robot", broken)
    for number in range(20):
        fuzz.run(number)
    (label,) = fuzz.tally.findings
    assert label.startswith("KeyError")
    assert [path.name for path in (tmp_path / "kept").iterdir()] == [
        f"3-{number}.yaml" for number in fuzz.tally.findings.values()
    ]


FILE = Path("robot.yaml")
DATA = b"name: a\nlegs: []\n"


def problem(line: int = 1, column: int = 1, *, file: str = "robot.yaml", path: str = "name") -> Problem:
    return Problem(file, line, column, path, "a", "b")


@pytest.mark.parametrize(
    "bad",
    [
        problem(4),
        problem(1, 9),
        problem(0, 0),
        problem(1, 0),
        problem(file="other.yaml"),
        Problem("robot.yaml", 1, 1, "name", "", "b"),
        Problem("robot.yaml", 1, 1, "name", "a\nb", "b"),
        Problem("robot.yaml", 1, 1, "name", "a" * 2000, "b"),
    ],
)
def test_a_problem_that_helps_nobody_is_a_finding(bad: Problem) -> None:
    check_problems([problem(), problem(3), problem(0, 0, path="")], FILE, DATA)
    with pytest.raises(WrongError):
        check_problems([problem(), bad], FILE, DATA)
    with pytest.raises(WrongError):
        check_problems([], FILE, DATA)


@pytest.mark.parametrize("pulse_us", [0.0, 5000.0, float("nan")])
def test_a_pulse_out_of_its_limits_is_a_finding(pulse_us: float) -> None:
    robot = juniper()
    tick = Controller(robot).tick(robot.period_s)
    check_pulses(robot, tick)
    tick = tick._replace(pulses_us=(*tick.pulses_us[:-1], pulse_us))
    with pytest.raises(WrongError):
        check_pulses(robot, tick)
