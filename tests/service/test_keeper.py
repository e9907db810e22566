"""What is kept over a reboot and told of the files, with a writer whose jobs are done by hand."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from hobnail.service import archive
from hobnail.service.archive import POSTURE_NAME, RECORDINGS, keep_recording, load_posture, save_posture
from hobnail.service.keeper import LOOK_EVERY_S, Keeper
from hobnail.service.recorder import PREVIOUS_NAME, RING_NAME, Recorder, read_ring
from hobnail.service.states import State
from hobnail.service.writer import Job, Writer
from machine_rig import Rig
from robots import bramble, juniper


class ByHand(Writer):
    """A writer that does what it is given when it is told to."""

    def __init__(self) -> None:
        self.dropped = 0
        self.jobs: list[Job] = []

    def put(self, job: Job) -> bool:
        self.jobs.append(job)
        return True

    def work(self) -> None:
        while self.jobs:
            self.jobs.pop(0)()


class Stage:
    """A rig, its recorder and its keeper in one directory."""

    def __init__(self, directory: Path) -> None:
        self.directory = directory
        self.source = directory / "robot.yaml"
        self.source.write_text("name: juniper")
        self.rig = Rig(juniper())
        self.recorder = Recorder(directory, juniper())
        self.writer = ByHand()
        sources = (self.source, directory / "robot.calibration.yaml")
        self.keeper = Keeper(self.rig.machine, self.writer, sources, directory, directory)

    def go(self, seconds: float) -> None:
        for _ in range(round(seconds / 0.01)):
            frame = self.rig.tick()
            if not frame.release:
                self.recorder.row(frame, self.rig.now_s, 0.01, 0.0, None, 6.0, ())
            self.keeper.update(self.rig.now_s)


@pytest.fixture
def stage(tmp_path: Path) -> Stage:
    return Stage(tmp_path)


def test_the_posture_is_kept_when_the_pulses_end(stage: Stage) -> None:
    stage.rig.ask("stand")
    stage.go(6.0)
    stage.rig.ask("stop", category=0)
    stage.go(0.1)
    stage.writer.work()
    assert load_posture(stage.directory, juniper()) == stage.rig.machine.body.last_rad


def test_a_stop_that_is_reset_before_the_next_tick_keeps_posture_and_recording(stage: Stage) -> None:
    stage.rig.ask("stand")
    stage.go(6.0)
    stage.rig.ask("stop", category=0)
    stage.rig.ask("reset")
    stage.go(0.01)
    stage.rig.expect(State.OFF)
    stage.writer.work()
    assert load_posture(stage.directory, juniper()) is not None
    (kept,) = (stage.directory / RECORDINGS).iterdir()
    assert kept.name.endswith("-stop.ring")


def test_a_stop_keeps_the_recording(stage: Stage) -> None:
    stage.rig.ask("stand")
    stage.go(6.0)
    stage.rig.ask("stop", category=1)
    stage.go(3.0)
    stage.rig.expect(State.STOPPED)
    stage.writer.work()
    (kept,) = (stage.directory / RECORDINGS).iterdir()
    assert kept.name.endswith("-stop.ring")
    assert kept.read_bytes() == (stage.directory / RING_NAME).read_bytes()
    assert len(read_ring(kept).rows) > 500


def test_a_stop_with_nothing_to_show_keeps_nothing(stage: Stage) -> None:
    stage.rig.ask("stop", category=0)
    stage.go(0.1)
    stage.writer.work()
    assert not (stage.directory / RECORDINGS).exists()


def test_an_orderly_end_keeps_no_recording(stage: Stage) -> None:
    stage.rig.ask("rest")
    stage.go(4.0)
    stage.rig.ask("off")
    stage.go(1.0)
    stage.writer.work()
    assert not (stage.directory / RECORDINGS).exists()
    assert (stage.directory / POSTURE_NAME).exists()


def test_an_interrupted_recording_is_kept_at_the_next_start(stage: Stage) -> None:
    stage.rig.ask("stand")
    stage.go(6.0)
    again = Stage(stage.directory)
    assert again.recorder.was_interrupted
    again.keeper.keep_previous()
    again.writer.work()
    (kept,) = (stage.directory / RECORDINGS).iterdir()
    assert kept.read_bytes() == (stage.directory / PREVIOUS_NAME).read_bytes()


def test_a_changed_configuration_is_told_and_not_acted_upon(stage: Stage) -> None:
    faults = stage.rig.machine.faults
    stage.rig.ask("stand")
    stage.go(LOOK_EVERY_S + 0.1)
    stage.writer.work()
    stage.go(0.1)
    assert not faults.is_latched("configuration-changed")
    (stage.directory / "robot.calibration.yaml").write_text("version: 1")
    stage.go(LOOK_EVERY_S + 0.1)
    stage.writer.work()
    stage.go(0.1)
    assert faults.is_latched("configuration-changed")
    stage.rig.expect(State.STANDING)
    (stage.directory / "robot.calibration.yaml").unlink()
    stage.go(LOOK_EVERY_S + 0.1)
    stage.writer.work()
    stage.go(11.0)
    assert not faults.is_latched("configuration-changed")


def test_dropped_lines_are_a_fault_that_stops_nothing(stage: Stage) -> None:
    stage.rig.ask("rest")
    stage.go(4.0)
    stage.writer.dropped = 3
    stage.go(0.1)
    assert stage.rig.machine.faults.is_latched("recorder-behind")
    stage.rig.expect(State.RESTING)


def test_without_a_place_nothing_is_kept(tmp_path: Path) -> None:
    rig, writer = Rig(juniper()), ByHand()
    keeper = Keeper(rig.machine, writer, (), tmp_path, None)
    rig.walk()
    keeper.update(rig.now_s)
    rig.ask("stop", category=0)
    rig.tick()
    keeper.update(rig.now_s)
    writer.work()
    assert list(tmp_path.iterdir()) == []


def test_a_posture_is_of_its_configuration_only(tmp_path: Path) -> None:
    save_posture(tmp_path, juniper(), [0.1] * 12)
    assert load_posture(tmp_path, juniper()) == (0.1,) * 12
    assert load_posture(tmp_path, replace(juniper(), digest="another")) is None
    assert load_posture(tmp_path, bramble()) is None


@pytest.mark.parametrize(
    "text", ["", "{", "[]", "null", '{"joints_rad": 3}', '{"digest": "", "joints_rad": ["a"]}']
)
def test_a_damaged_posture_is_none(text: str, tmp_path: Path) -> None:
    (tmp_path / POSTURE_NAME).write_text(text)
    assert load_posture(tmp_path, juniper()) is None


@pytest.mark.parametrize("angle", ["NaN", "Infinity"])
def test_a_posture_that_is_no_number_is_none(angle: str, tmp_path: Path) -> None:
    save_posture(tmp_path, juniper(), [0.1] * 12)
    text = (tmp_path / POSTURE_NAME).read_text().replace("0.1", angle, 1)
    (tmp_path / POSTURE_NAME).write_text(text)
    assert json.loads(text)["joints_rad"][0] != 0.1
    assert load_posture(tmp_path, juniper()) is None


def test_only_so_many_recordings_are_kept(
    stage: Stage, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setattr(archive, "KEPT", 3)
    stage.rig.ask("rest")
    stage.go(1.0)
    for number in range(6):
        keep_recording(tmp_path / RING_NAME, tmp_path, f"number-{number}", 1e9 + number)
    names = sorted(path.name for path in (tmp_path / RECORDINGS).iterdir())
    assert [name[-13:] for name in names] == ["number-3.ring", "number-4.ring", "number-5.ring"]
