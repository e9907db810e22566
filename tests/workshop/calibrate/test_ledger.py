"""The calibration file at work: kept at once, dated, taken back; who measured what when."""

from __future__ import annotations

import math
from collections.abc import Mapping
from contextlib import suppress
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.config import load_robot
from hobnail.config.calibration import WALK, JointCalibration
from hobnail.errors import CalibrationError, CommandError
from hobnail.workshop.calibrate.ledger import Ledger
from robots import CONFIG, examples

CONFIG_FILE = CONFIG / "juniper.yaml"
CONFIGURED = load_robot(CONFIG_FILE, calibrated=False)
NAMES = [joint.name for joint in CONFIGURED.joints]


class Clock:
    """A wall clock that is set by hand."""

    def __init__(self) -> None:
        self.now = datetime(2026, 3, 1, 12, 0, 0, tzinfo=UTC)

    def __call__(self) -> datetime:
        self.now += timedelta(seconds=1)
        return self.now


def ledger(folder: Path, who: str = "bench", clock: Clock | None = None) -> Ledger:
    config = folder / "juniper.yaml"
    if not config.exists():
        config.write_bytes(CONFIG_FILE.read_bytes())
    return Ledger(config, CONFIGURED, who, now=clock or Clock())


def test_what_is_kept_is_in_the_file_and_in_the_robot(tmp_path: Path) -> None:
    book = ledger(tmp_path)
    book.keep("left-front.hip", {"trim_rad": math.radians(-3.5)})
    book.keep("main", {"oscillator_hz": 25.4e6})
    loaded = load_robot(tmp_path / "juniper.yaml")
    assert math.degrees(loaded.joints[1].trim_rad) == pytest.approx(-3.5)
    assert loaded.boards[0].oscillator_hz == 25.4e6
    assert loaded.joints == book.robot.joints
    entries = book.entries()
    assert [(each.part, each.key, each.value, each.who, each.days) for each in entries] == [
        ("left-front.hip", "trim_deg", "-3.5", "bench", 0),
        ("main", "oscillator_mhz", "25.4", "bench", 0),
    ]
    assert entries[0].when == "2026-03-01T12:00:01Z"


def test_old_values_are_told_to_be_old(tmp_path: Path) -> None:
    clock = Clock()
    book = ledger(tmp_path, clock=clock)
    book.keep("left-front.hip", {"trim_rad": 0.01})
    clock.now += timedelta(days=179)
    assert not book.entries()[0].is_stale
    clock.now += timedelta(days=2)
    (entry,) = book.entries()
    assert entry.is_stale
    assert entry.days == 181


def test_a_value_changed_by_hand_has_no_record(tmp_path: Path) -> None:
    book = ledger(tmp_path)
    book.keep("left-front.hip", {"trim_rad": math.radians(1.0)})
    book.path.write_text(book.path.read_text().replace("{trim_deg: 1}", "{trim_deg: 2}"))
    (entry,) = book.entries()
    assert (entry.value, entry.when, entry.days) == ("2", "", None)


def test_taking_back_goes_back_step_by_step(tmp_path: Path) -> None:
    book = ledger(tmp_path)
    for degrees in (1.0, 2.0):
        book.keep("left-front.hip", {"trim_rad": math.radians(degrees)})
    book.keep("left-front.roll", {"direction": -1})
    assert book.undo().what == "undo: left-front.roll direction"
    assert book.calibration.joints.keys() == {"left-front.hip"}
    change = book.undo()
    assert (change.what, change.old, change.new) == ("undo: left-front.hip trim_deg", "2", "1")
    (entry,) = book.entries()
    assert (entry.value, entry.when) == ("1", "2026-03-01T12:00:01Z")  # measured then, not today
    book.keep("main", {"oscillator_hz": 25.1e6})
    assert book.undo().what == "undo: main oscillator_mhz"
    assert book.undo().what == "undo: left-front.hip trim_deg"
    assert book.entries() == []
    assert load_robot(tmp_path / "juniper.yaml").joints == CONFIGURED.joints
    with pytest.raises(CommandError, match="nothing to undo"):
        book.undo()
    assert len(book.calibration.history) == 8


@given(
    st.lists(
        st.one_of(
            st.tuples(st.sampled_from(NAMES), st.floats(-40.0, 40.0)),
            st.just(("undo", 0.0)),
        ),
        max_size=12,
    )
)
@examples(20)
def test_any_row_of_changes_taken_back_is_as_before(tmp_path_factory: pytest.TempPathFactory, acts) -> None:  # type: ignore[no-untyped-def]
    """Against a stack of whole calibrations."""
    book = ledger(tmp_path_factory.mktemp("book"))
    stack = [dict(book.calibration.joints)]
    for name, degrees in acts:
        if name != "undo":
            book.keep(name, {"trim_rad": math.radians(degrees)})
            stack.append(dict(book.calibration.joints))
        elif len(stack) > 1:
            book.undo()
            stack.pop()
        assert trims(book.calibration.joints) == trims(stack[-1])


def trims(joints: Mapping[str, JointCalibration]) -> dict[str, float | None]:
    return {name: joint.trim_rad for name, joint in joints.items() if joint.trim_rad}


def test_typed_values_are_read_as_the_file_is(tmp_path: Path) -> None:
    book = ledger(tmp_path)
    book.set("left-front.knee", ["trim_deg=-3.5", "pulse_limits_us=[700, 2300]"])
    book.set("left-front.knee", ["pulse_map_deg_us = [[-90, 820], [0, 1490], [90, 2180]]"])
    book.set("main", ["oscillator_mhz=25.3"])
    knee = book.robot.joints[2]
    assert math.degrees(knee.trim_rad) == pytest.approx(-3.5)
    assert knee.pulse_limits_us == (700.0, 2300.0)
    assert knee.pulse_map[1] == (0.0, 1490.0)
    assert book.robot.boards[0].oscillator_hz == pytest.approx(25.3e6)


@pytest.mark.parametrize(
    ("setting", "told"),
    [
        ("trim_deg", "allowed: KEY=VALUE"),
        ("trim_deg=99", "a number from -45 to 45 deg"),
        ("trim=1", "Did you mean trim_deg?"),
        ("trim_deg=-3,5", "decimal point"),
        ("trim_deg=", "found nothing"),
        ("direction=0", "allowed: 1 or -1"),
        ("pulse_map_deg_us=[[0, 1500], [1, 1400]]", "rise in angle and in pulse"),
        ("pulse_limits_us=[2000, 1000]", "more than 2000"),
        ("pulse_limits_us=[500, 3400]", "in the frame of board main"),
        ("trim_deg=[", "--set"),
        ("trim_deg=1\ndirection: -1", "allowed: KEY=VALUE"),
        ("oscillator_mhz=25", "unknown key"),
    ],
)
def test_bad_values_are_refused_and_the_file_is_untouched(tmp_path: Path, setting: str, told: str) -> None:
    book = ledger(tmp_path)
    with pytest.raises((CalibrationError, CommandError)) as caught:
        book.set("left-front.knee", [setting])
    assert told in str(caught.value)
    assert not book.path.exists()


@given(st.text(max_size=40))
@examples(100)
def test_whatever_is_typed_is_kept_or_refused(tmp_path_factory: pytest.TempPathFactory, text: str) -> None:
    book = ledger(tmp_path_factory.mktemp("book"))
    for setting in (text, f"trim_deg={text}"):
        with suppress(CalibrationError, CommandError):
            book.set("left-front.knee", [setting])
        assert book.calibration.robot == "juniper"


@pytest.mark.parametrize("who", ["", "a" * 61, "a\nb", 'a"b', "\x1b[31m"])
def test_a_name_that_no_record_can_hold_is_refused_before_the_work(tmp_path: Path, who: str) -> None:
    with pytest.raises(CommandError, match="--who is"):
        ledger(tmp_path, who)


def test_a_file_that_cannot_be_used_is_refused_before_the_work(tmp_path: Path) -> None:
    book = ledger(tmp_path)
    book.path.write_text("version: 2\n")
    with pytest.raises(CalibrationError):
        ledger(tmp_path)


def test_a_folder_that_cannot_be_written_to_is_told_before_the_work(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    book = ledger(tmp_path)
    book.check_writable()
    monkeypatch.setattr("os.access", lambda *_: False)
    with pytest.raises(CalibrationError, match="ask for the right, or be another user"):
        book.check_writable()


def test_walks_are_kept_forgotten_and_taken_back(tmp_path: Path) -> None:
    book = ledger(tmp_path)
    book.keep(WALK, {"ahead": (0.94, 0.012, math.radians(-1.5)), "turn": 0.97})
    text = book.path.read_text()
    assert "walk: {ahead_mm_mm_deg: [940, 12, -1.5], turn_deg: 349.2}" in text
    walk = load_robot(tmp_path / "juniper.yaml").walk
    assert walk.ahead == pytest.approx((0.94, 0.012, math.radians(-1.5)))
    assert walk.turn == pytest.approx(0.97)
    assert walk.sideways == (0.0, 1.0, 0.0)
    book.forget(WALK)
    assert load_robot(tmp_path / "juniper.yaml").walk == CONFIGURED.walk
    assert "\nwalk:" not in book.path.read_text()
    book.undo()
    assert load_robot(tmp_path / "juniper.yaml").walk.turn == pytest.approx(0.97)


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("349.2", "100", "a number from 252 to 504 deg"),
        ("[940, 12, -1.5]", "[940, 12]", "[a number from 700 to 1400 mm, a number from -300 to 300 mm"),
        ("[940, 12, -1.5]", "[940, 1200, -1.5]", "a number from -300 to 300 mm"),
        ("turn_deg", "turns_deg", "Did you mean turn_deg?"),
    ],
)
def test_a_walk_out_of_bounds_is_refused_at_its_place(tmp_path: Path, old: str, new: str, told: str) -> None:
    book = ledger(tmp_path)
    book.keep(WALK, {"ahead": (0.94, 0.012, math.radians(-1.5)), "turn": 0.97})
    text = book.path.read_text()
    head, history = text.split("history:")
    assert old in head
    book.path.write_text(f"{head.replace(old, new)}history:{history}")
    with pytest.raises(CalibrationError) as caught:
        load_robot(tmp_path / "juniper.yaml")
    assert told in str(caught.value)
