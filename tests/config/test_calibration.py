"""The calibration file: round trips, strictness, its history, and that a crash leaves it whole."""

from __future__ import annotations

import hashlib
import io
import math
import os
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from hobnail.config import calibration as module
from hobnail.config import load_robot
from hobnail.config.calibration import (
    BoardCalibration,
    Calibration,
    Change,
    JointCalibration,
    apply_calibration,
    calibration_path,
    interpret,
    read_calibration,
    render,
    write_calibration,
)
from hobnail.config.calibration_history import changed
from hobnail.config.strict_yaml import Report
from hobnail.errors import CalibrationError, ConfigError
from hobnail.robot import Robot
from hobnail.servo import pulse_us

SORREL = Path(__file__).parents[1] / "corpus" / "sorrel.yaml"
ROBOT = load_robot(SORREL)
WHEN = "2026-03-01T14:30:00Z"

MEASURED = """\
version: 1
robot: sorrel
boards:
  main: {oscillator_mhz: 25.31}
joints:
  left-front.roll: {trim_deg: -1.25, direction: -1}
  right-hind.knee:
    trim_deg: 2
    pulse_map_deg_us: [[-90, 820], [0, 1490], [90, 2180]]
    pulse_limits_us: [700, 2300]
history:
  - {when: "2026-03-01T14:30:00Z", who: bench, what: left-front.roll trim_deg, old: "0", new: "-1.25"}
"""


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A copy of sorrel's configuration, with no calibration beside it yet."""
    path = tmp_path / "sorrel.yaml"
    path.write_bytes(SORREL.read_bytes())
    return path


def refused(config: Path, text: str) -> list[str]:
    path = calibration_path(config)
    path.write_text(text)
    with pytest.raises(CalibrationError) as caught:
        load_robot(config)
    assert all(problem.file == str(path) for problem in caught.value.problems)
    return [str(problem).removeprefix(f"{path}:") for problem in caught.value.problems]


def test_it_is_kept_beside_the_configuration() -> None:
    assert calibration_path("/etc/hobnail/sorrel.yaml") == Path("/etc/hobnail/sorrel.calibration.yaml")


def test_what_was_measured_goes_before_what_was_configured(config: Path) -> None:
    calibration_path(config).write_text(MEASURED)
    robot = load_robot(config)
    joints = {joint.name: joint for joint in robot.joints}
    before = {joint.name: joint for joint in ROBOT.joints}
    roll, knee = joints["left-front.roll"], joints["right-hind.knee"]
    assert (roll.trim_rad, roll.direction) == (math.radians(-1.25), -1)
    assert roll.pulse_map == before["left-front.roll"].pulse_map
    assert knee.trim_rad == math.radians(2)
    assert knee.pulse_map == ((math.radians(-90), 820.0), (0.0, 1490.0), (math.radians(90), 2180.0))
    assert knee.pulse_limits_us == (700.0, 2300.0)
    assert robot.boards[0].oscillator_hz == 25.31e6
    untouched = set(joints) - {"left-front.roll", "right-hind.knee"}
    assert all(joints[name] == before[name] for name in untouched)
    assert replace(robot, legs=ROBOT.legs, boards=ROBOT.boards, source="", digest="") == replace(
        ROBOT, source="", digest=""
    )
    both = config.read_bytes() + MEASURED.encode()
    assert robot.digest == hashlib.sha256(both).hexdigest() != ROBOT.digest
    # By hand: shaft 2 deg past the joint at its zero of -90 deg, on the map's upper stretch.
    assert pulse_us(knee, math.radians(-90)) == pytest.approx(1490 + 2 / 90 * (2180 - 1490))


def test_reading_alone_is_as_strict(config: Path) -> None:
    path = calibration_path(config)
    path.write_text(MEASURED.replace("left-front.roll:", "left-front.toe:", 1))
    with pytest.raises(CalibrationError, match="unknown name"):
        read_calibration(path, ROBOT)


def test_none_is_an_empty_one(config: Path) -> None:
    assert read_calibration(calibration_path(config), ROBOT) == Calibration(robot="sorrel")
    assert apply_calibration(ROBOT, Calibration(robot="sorrel")) == ROBOT


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("robot: sorrel", "robot: bramble", "2:8: robot: found bramble; allowed: sorrel"),
        ("version: 1", "version: 2", "1:10: version: found 2"),
        ("version: 1\n", "", "1:1: version: found nothing"),
        ("left-front.roll:", "left-front.rol:", "Did you mean left-front.roll?"),
        ("left-front.roll:", "right-hind.knee:", "7:3: joints.'right-hind.knee': found a second"),
        (
            "  main:",
            "  mian:",
            "4:3: boards.mian: found unknown name 'mian'; allowed: main. Did you mean main?",
        ),
        ("trim_deg: 2", "trim: 2", "Did you mean trim_deg?"),
        ("trim_deg: 2", "trim_deg: 46", "allowed: a number from -45 to 45 deg"),
        ("trim_deg: 2", "trim_deg: .nan", "finite"),
        ("direction: -1", "direction: -2", "allowed: 1 or -1"),
        ("25.31", "31", "allowed: a number from 20 to 30 MHz"),
        ("[0, 1490]", "[0, 800]", "rise in angle and in pulse"),
        ("[0, 1490]", "[-100, 1490]", "rise in angle and in pulse"),
        ("[700, 2300]", "[700, 700]", "more than 700"),
        ('"2026-03-01T14:30:00Z"', "2026-03-01T14:30:00Z", "put it in quotes"),
        ('"2026-03-01T14:30:00Z"', "yesterday", "a date and time such as"),
        (MEASURED, "", "an empty file"),
        (MEASURED[MEASURED.index("history") :], "", "1:1: history: found nothing"),
    ],
)
def test_bad_files_are_refused_at_their_place(config: Path, old: str, new: str, told: str) -> None:
    assert old in MEASURED
    problems = refused(config, MEASURED.replace(old, new, 1))
    assert any(told in problem for problem in problems), problems


def test_limits_must_fit_the_frame_of_the_board(config: Path) -> None:
    config.write_text(config.read_text().replace("frame_hz: 100", "frame_hz: 330"))
    (problem,) = refused(config, MEASURED.replace("[700, 2300]", "[700, 2900]"))
    assert "at most 2878.79 us, in the frame of board main" in problem


def test_a_folder_in_its_place_is_told(config: Path) -> None:
    calibration_path(config).mkdir()
    with pytest.raises(CalibrationError, match="a directory"):
        load_robot(config)


def test_a_dangling_link_is_told(config: Path) -> None:
    calibration_path(config).symlink_to(config.parent / "gone")
    with pytest.raises(CalibrationError, match="no such file"):
        load_robot(config)


def test_problems_of_both_files_are_told_together(config: Path) -> None:
    config.write_text(config.read_text().replace("period_ms: 10", "period_ms: 1000"))
    calibration_path(config).write_text(MEASURED.replace("trim_deg: 2", "trim_deg: 99"))
    with pytest.raises(ConfigError) as caught:
        load_robot(config)
    assert not isinstance(caught.value, CalibrationError)
    assert [problem.key_path for problem in caught.value.problems] == [
        "period_ms",
        "joints.'right-hind.knee'.trim_deg",
    ]


def test_what_was_measured_may_put_a_height_out_of_reach(config: Path) -> None:
    calibration_path(config).write_text(MEASURED.replace("[700, 2300]", "[700, 1900]"))
    with pytest.raises(ConfigError, match=r"stance\.rest_height_mm.*right-hind\.knee would be at"):
        load_robot(config)


def test_cut_at_any_byte_it_is_refused_or_has_every_joint(config: Path) -> None:
    path, data = calibration_path(config), MEASURED.encode()
    whole = read_whole(data)
    for length in range(len(data)):
        path.write_bytes(data[:length])
        try:
            robot = load_robot(config)
        except CalibrationError as error:
            problems = error.problems
        else:
            problems = ()
            assert robot.joints == apply_calibration(ROBOT, whole).joints
        assert all(problem.found and problem.allowed for problem in problems)


def read_whole(data: bytes, robot: Robot = ROBOT) -> Calibration:
    report = Report("calibration")
    found = interpret(data, robot, report)
    assert found is not None, report.problems()
    return found


def test_changes_are_written_down_with_old_and_new() -> None:
    first = changed(
        Calibration(robot="sorrel"),
        ROBOT,
        "left-front.hip",
        when=WHEN,
        who="bench",
        trim_rad=math.radians(1.5),
    )
    second = changed(
        first,
        ROBOT,
        "left-front.hip",
        when="2026-04-01T08:00:00Z",
        who="Bench Ümit",
        trim_rad=math.radians(-0.25),
        direction=-1,
        pulse_map=((-1.5, 600.0), (1.5, 2400.0)),
        pulse_limits_us=(620.5, 2380.0),
    )
    third = changed(second, ROBOT, "main", when=WHEN, who="bench", oscillator_hz=25.312e6)
    assert third.joints["left-front.hip"].trim_rad == math.radians(-0.25)
    assert third.boards["main"].oscillator_hz == 25.312e6
    assert [(change.who, change.what, change.old, change.new) for change in third.history] == [
        ("bench", "left-front.hip trim_deg", "0", "1.5"),
        ("Bench Ümit", "left-front.hip trim_deg", "1.5", "-0.25"),
        ("Bench Ümit", "left-front.hip direction", "1", "-1"),
        (
            "Bench Ümit",
            "left-front.hip pulse_map_deg_us",
            "[[-135, 500], [135, 2500]]",
            "[[-85.9437, 600], [85.9437, 2400]]",
        ),
        ("Bench Ümit", "left-front.hip pulse_limits_us", "[550, 2450]", "[620.5, 2380]"),
        ("bench", "main oscillator_mhz", "25", "25.312"),
    ]


@pytest.mark.parametrize(
    ("name", "values", "told"),
    [
        ("left-front.hip", {"trim_rad": 1.0}, "from -45 to 45 deg"),
        ("left-front.hip", {"trim_rad": math.nan}, "trim_deg"),
        ("left-front.hip", {"pulse_limits_us": (0.0, 2000.0)}, "from 200 to 3500 us"),
        ("left-front.hip", {"pulse_map": ((0.0, 1500.0), (1.0, 1400.0))}, "rise"),
        ("main", {"oscillator_hz": 31e6}, "from 20 to 30 MHz"),
    ],
)
def test_a_change_that_would_not_load_is_refused(name: str, values: dict[str, Any], told: str) -> None:
    with pytest.raises(CalibrationError, match=told):
        changed(Calibration(robot="sorrel"), ROBOT, name, when=WHEN, who="bench", **values)
    with pytest.raises(CalibrationError, match="a date and time"):
        changed(Calibration(robot="sorrel"), ROBOT, "main", when="now", who="bench", oscillator_hz=25e6)
    with pytest.raises(KeyError):
        changed(Calibration(robot="sorrel"), ROBOT, "left-front.toe", when=WHEN, who="bench", trim_rad=0.0)


@settings(max_examples=60, deadline=None)
@given(
    trim=st.floats(-0.78, 0.78),
    direction=st.sampled_from([1, -1]),
    steps=st.lists(st.tuples(st.integers(10000, 100000), st.floats(2.0, 20.0)), min_size=1, max_size=8),
    oscillator=st.floats(20e6, 30e6),
    who=st.text(st.characters(categories=["L", "Nd"]), min_size=1, max_size=60),
)
def test_what_is_written_reads_back_the_same(
    trim: float, direction: int, steps: list[tuple[int, float]], oscillator: float, who: str
) -> None:
    """`steps`: of a pulse map, in 0.0001 degree and us a degree."""
    points = [(-400000, 600.0)]
    for width, rate in steps:
        points.append((points[-1][0] + width, round(points[-1][1] + width / 1e4 * rate, 2)))
    values: dict[str, Any] = {"trim_rad": trim, "direction": direction}
    values["pulse_map"] = tuple((math.radians(shaft / 1e4), pulse) for shaft, pulse in points)
    empty = Calibration(robot="sorrel")
    once = changed(empty, ROBOT, "left-hind.roll", when=WHEN, who=who, **values)
    once = changed(once, ROBOT, "main", when=WHEN, who=who, oscillator_hz=oscillator)
    assert read_whole(render(once).encode()) == once
    joint = once.joints["left-hind.roll"]
    assert joint.trim_rad == pytest.approx(trim, abs=math.radians(0.00006))
    assert joint.pulse_map is not None
    for (shaft, pulse), (want_shaft, want_pulse) in zip(joint.pulse_map, values["pulse_map"], strict=True):
        assert shaft == pytest.approx(want_shaft, abs=1e-12)
        assert pulse == want_pulse
    # Another reader of YAML sees the same numbers.
    seen = yaml.safe_load(render(once))
    assert seen["joints"]["left-hind.roll"]["direction"] == direction
    assert seen["joints"]["left-hind.roll"]["trim_deg"] == pytest.approx(math.degrees(trim), abs=0.00006)
    assert seen["history"][0]["who"] == who


# --- Writing ---------------------------------------------------------------------

OLD = Calibration(
    robot="sorrel",
    joints={"left-front.roll": JointCalibration(trim_rad=math.radians(1.0))},
    history=(Change(when=WHEN, who="bench", what="left-front.roll trim_deg", old="0", new="1"),),
)
NEW = replace(OLD, boards={"main": BoardCalibration(oscillator_hz=26e6)})


class PowerCut(BaseException):
    """Ends the process in the test's stead."""


class Dying(io.FileIO):
    """A file that takes a number of bytes, and then fails in a given way."""

    room = 0
    end: BaseException = PowerCut()

    def write(self, data: Any) -> int:
        view = memoryview(data).cast("B")
        if len(view) <= Dying.room:
            Dying.room -= len(view)
            return super().write(view)
        super().write(view[: Dying.room])
        Dying.room = 0
        raise Dying.end


@pytest.mark.parametrize("end", [PowerCut(), OSError(28, "No space left on device")], ids=["cut", "full"])
def test_failing_at_any_byte_leaves_the_old_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, end: BaseException
) -> None:
    path = tmp_path / "sorrel.calibration.yaml"
    write_calibration(path, OLD)

    def dying_open(descriptor: int, mode: str, encoding: str, newline: str) -> io.TextIOWrapper:
        return io.TextIOWrapper(
            io.BufferedWriter(Dying(descriptor, mode), buffer_size=1), encoding, newline=newline
        )

    monkeypatch.setattr(module, "open", dying_open, raising=False)
    monkeypatch.setattr(Dying, "end", end)
    for room in range(len(render(NEW).encode())):
        monkeypatch.setattr(Dying, "room", room)
        with pytest.raises(PowerCut if isinstance(end, PowerCut) else CalibrationError):
            write_calibration(path, NEW)
        assert read_calibration(path, ROBOT) == OLD
        assert os.listdir(tmp_path) == [path.name]


@pytest.mark.parametrize("name", ["fsync", "replace", "fchmod"])
@pytest.mark.parametrize("end", [PowerCut(), OSError(5, "Input/output error")], ids=["cut", "error"])
def test_failing_at_any_step_leaves_a_whole_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, end: BaseException
) -> None:
    path = tmp_path / "sorrel.calibration.yaml"
    write_calibration(path, OLD)
    real: Callable[..., Any] = getattr(os, name)
    for good in range(2 if name == "fsync" else 1):
        calls = 0

        def failing(*arguments: Any, allowed: int = good) -> Any:
            nonlocal calls
            calls += 1
            if calls > allowed:
                raise end
            return real(*arguments)

        monkeypatch.setattr(os, name, failing)
        with pytest.raises(PowerCut if isinstance(end, PowerCut) else CalibrationError) as caught:
            write_calibration(path, NEW)
        monkeypatch.setattr(os, name, real)
        renamed = good == 1  # the second fsync is the folder's
        assert read_calibration(path, ROBOT) == (NEW if renamed else OLD)
        if isinstance(caught.value, CalibrationError):
            assert ("power cut" if renamed else "as it was") in str(caught.value)
        assert os.listdir(tmp_path) == [path.name]


def test_bytes_are_on_the_disk_before_the_name_is(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "sorrel.calibration.yaml"
    done: list[str] = []

    def traced(name: str, real: Callable[..., Any]) -> Callable[..., Any]:
        def call(*arguments: Any) -> Any:
            target = arguments[0]
            kind = ""
            if isinstance(target, int):
                kind = " folder" if os.path.isdir(f"/proc/self/fd/{target}") else " file"
            done.append(name + kind)
            return real(*arguments)

        return call

    for name in ("fsync", "replace"):
        monkeypatch.setattr(os, name, traced(name, getattr(os, name)))
    write_calibration(path, NEW)
    assert done == ["fsync file", "replace", "fsync folder"]


def test_a_left_over_temporary_file_harms_nothing(config: Path) -> None:
    """What a real power cut in the middle leaves behind."""
    path = calibration_path(config)
    write_calibration(path, OLD)
    (config.parent / f".{path.name}.abc.tmp").write_text("version: 1\nrobot: jun")
    assert load_robot(config).joints[0].trim_rad == math.radians(1.0)
    write_calibration(path, NEW)
    assert read_calibration(path, ROBOT) == NEW


def test_mode_and_links_are_kept(tmp_path: Path) -> None:
    real = tmp_path / "state"
    real.mkdir()
    link = tmp_path / "sorrel.calibration.yaml"
    link.symlink_to(real / "measured.yaml")
    write_calibration(link, OLD)
    assert (real / "measured.yaml").stat().st_mode & 0o777 == 0o644
    (real / "measured.yaml").chmod(0o660)
    write_calibration(link, NEW)
    assert link.is_symlink()
    assert (real / "measured.yaml").stat().st_mode & 0o777 == 0o660
    assert read_calibration(link, ROBOT) == NEW


def test_a_folder_that_cannot_be_written_to_is_told(tmp_path: Path) -> None:
    with pytest.raises(CalibrationError, match=r"No such file.*The file is as it was"):
        write_calibration(tmp_path / "none" / "sorrel.calibration.yaml", NEW)
