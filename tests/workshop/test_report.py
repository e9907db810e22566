"""Report, film and the command: files that a person can look at, and exit codes that a script can."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
from PIL import Image

from hobnail.cli.main import main
from hobnail.errors import CommandError
from hobnail.workshop.rehearse import Recording, measure, run, walking
from hobnail.workshop.rehearse.film import film, frame
from hobnail.workshop.rehearse.report import HEADINGS, as_json, page, plots, row, table
from workshop.machines import burdock

JUNIPER = str(Path(__file__).parents[2] / "config" / "juniper.yaml")


@pytest.fixture(scope="module")
def recording() -> Recording:
    robot = burdock()
    return run(robot, walking(robot, 0.08, yaw_rate=0.2, duration_s=1.0))


def test_the_page_stands_alone_and_says_what_it_must(recording: Recording) -> None:
    result = measure(recording)
    text = page("bur<dock>", [(recording, result)])
    assert "<script" not in text
    assert not re.findall(r'(?:src|href)="(?!#)[^"]*"', text)
    assert "bur&lt;dock&gt; rehearsed" in text
    for heading in HEADINGS:
        assert f"<th>{heading}</th>" in text
    assert text.count("<svg") == 1


def test_plots_are_svg_with_six_panels(recording: Recording) -> None:
    svg = plots(recording)
    root = ElementTree.fromstring(svg)
    assert root.tag.endswith("svg")
    assert len(re.findall(r'id="axes_\d+"', svg)) == 6


def test_the_table_has_a_row_a_scenario_and_tells_failures(recording: Recording) -> None:
    result = measure(recording)
    lines = table([result, result])
    assert len(lines) == 3 + 2 * len(result.failures())
    assert lines[1].startswith("walk")
    assert len(row(result)) == len(HEADINGS)


def test_json_is_in_si_units_and_has_the_verdict(recording: Recording) -> None:
    result = measure(recording)
    told = json.loads(json.dumps(as_json(result), allow_nan=False))
    assert told["passed"] == (not result.failures())
    assert told["tilt_95_rad"] == result.tilt_95_rad
    assert told["limits"]["error_share"] == 0.05


def test_a_film_moves_in_real_time(recording: Recording, tmp_path: Path) -> None:
    path = tmp_path / "walk.gif"
    count = film(recording, path)
    with Image.open(path) as picture:
        assert picture.n_frames <= count  # type: ignore[attr-defined]
        shown = [picture.info["duration"]]
        for index in range(1, picture.n_frames):  # type: ignore[attr-defined]
            picture.seek(index)
            shown.append(picture.info["duration"])
    assert sum(shown) / 1000 == pytest.approx(recording.time_s[-1], abs=0.1)


def test_frames_show_the_robot_and_where_it_is(recording: Recording) -> None:
    first, later = (np.asarray(frame(recording, index), dtype=int) for index in (80, 170))
    assert first.shape == (600, 720, 3)
    # Ink in both views, and not the same in both pictures.
    for view in (slice(40, 320), slice(350, 600)):
        assert (first[view] < 60).all(axis=2).sum() > 200
        assert np.abs(first[view] - later[view]).sum() > 1000


def test_another_ending_is_refused(recording: Recording, tmp_path: Path) -> None:
    with pytest.raises(CommandError, match=r"\.gif or \.webp"):
        film(recording, tmp_path / "walk.mpeg")


class TestCommand:
    def rehearse(self, capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str, str]:
        code = main(["rehearse", JUNIPER, *words])
        captured = capsys.readouterr()
        return code, captured.out, captured.err

    def test_a_table_and_files(self, capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
        report, picture = tmp_path / "r.html", tmp_path / "f.webp"
        code, out, err = self.rehearse(
            capsys, "--scenario", "stop", "--report", str(report), "--film", str(picture)
        )
        assert (code, err) == (0, "")
        assert out.splitlines()[1].startswith("stop")
        assert "juniper rehearsed: all passed" in report.read_text(encoding="utf-8")
        assert picture.stat().st_size > 10_000

    def test_json_and_exit_code_of_a_missed_walk(self, capsys: pytest.CaptureFixture[str]) -> None:
        code, out, _ = self.rehearse(
            capsys, "--walk", "0.1", "0", "0", "--json", "--inject", "battery_shift_m=-0.06,0,0"
        )
        told: dict[str, Any] = json.loads(out)
        assert code == 1
        assert told["robot"] == "juniper"
        assert told["results"][0]["failures"]

    def test_the_list_names_scenarios_and_errors(self, capsys: pytest.CaptureFixture[str]) -> None:
        code, out, _ = self.rehearse(capsys, "--list")
        assert code == 0
        for word in ("emergency-1", "random", "zero_error_rad", "push_ns"):
            assert word in out

    @pytest.mark.parametrize(
        ("words", "told"),
        [
            (("--scenario", "moonwalk"), "there is no scenario 'moonwalk'"),
            (("--inject", "gremlins=3"), "gremlins=3"),
            (("--inject", "friction=slippery"), "friction is 'slippery'"),
            (("--inject", "friction=-1"), "friction is -1.0; allowed"),
            (("--inject", "push_ns=1"), "allowed 2 number(s)"),
            (("--walk", "fast", "0", "0"), "fast"),
            (("--gait", "crawl"), "--gait goes with --walk"),
            (("--walk", "0.1", "0", "0", "--gait", "gallop"), "allowed: trot"),
            (("--seed", "-1"), "--seed"),
            (("--scenario", "stop", "--film", "walk.mpeg"), ".gif or .webp"),
        ],
    )
    def test_wrong_usage_is_told_in_a_line_and_code_64(
        self, capsys: pytest.CaptureFixture[str], words: tuple[str, ...], told: str
    ) -> None:
        code, _, err = self.rehearse(capsys, *words)
        assert code == 64
        assert told in err
        assert "Traceback" not in err

    def test_a_missing_folder_is_told_before_the_work(self, capsys: pytest.CaptureFixture[str]) -> None:
        code, out, err = self.rehearse(capsys, "--scenario", "stop", "--report", "/nowhere/at/all.html")
        assert code == 66
        assert out == ""
        assert "/nowhere/at/all.html" in err

    def test_command_and_route_files(self, capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
        commands = tmp_path / "mine.yaml"
        commands.write_text("duration_s: 2\ncommands:\n  - {at_s: 0.5, walk: {forward_mm_s: 100}}\n")
        code, out, _ = self.rehearse(capsys, "--commands", str(commands))
        assert code == 0
        assert out.splitlines()[1].startswith("mine")
        commands.write_text("duration_s: 2\ncommands:\n  - {at_s: 0.5, walk: {forward: 100}}\n")
        code, _, err = self.rehearse(capsys, "--commands", str(commands))
        assert code == 78
        assert f"{commands}:3:" in err
        assert "forward_mm_s" in err

    def test_without_the_engine_it_says_what_to_install(
        self, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setitem(__import__("sys").modules, "mujoco", None)
        code, _, err = self.rehearse(capsys, "--scenario", "stop")
        assert code == 69
        assert "pip install 'hobnail[physics]'" in err
