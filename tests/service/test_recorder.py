"""The ring of the last minute: whole rows from any cut or damaged file, the posture over restarts."""

from __future__ import annotations

import json
import math
import os
import zlib
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.errors import ServiceError
from hobnail.robot import Robot
from hobnail.service import recorder as module
from hobnail.service.recorder import (
    HEADER_BYTES,
    PREVIOUS_NAME,
    RING_NAME,
    Recorder,
    last_posture,
    last_state,
    read_ring,
)
from hobnail.service.states import State
from machine_rig import Rig
from robots import bramble, examples, juniper


def record(recorder: Recorder, rig: Rig, ticks: int) -> None:
    """Tick and keep rows, as the loop does."""
    for _ in range(ticks):
        frame = rig.tick()
        if not frame.release:
            recorder.row(frame, rig.now_s, 0.01, 1e-4, rig.machine.command, 6.0, rig.machine.faults.names())


def recorded(directory: Path, robot: Robot, ticks: int) -> tuple[Rig, Path]:
    """A walk of some ticks, and the file that it left."""
    recorder = Recorder(directory, robot)
    rig = Rig(robot)
    rig.walk(0.1)
    record(recorder, rig, ticks)
    recorder.close()
    return rig, directory / RING_NAME


@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
def test_rows_come_back_as_they_were_written(robot: Robot, tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, robot)
    rig = Rig(robot)
    rig.walk(0.1)
    rig.machine.report("bus-retried", rig.now_s)
    rig.machine.report("tick-overrun", rig.now_s)
    frame = rig.tick()
    recorder.row(frame, rig.now_s, 0.02, 0.00025, rig.machine.command, 5.9, rig.machine.faults.names())
    recorder.close()
    ring = read_ring(tmp_path / RING_NAME)
    assert ring.header["joints"] == [joint.name for joint in robot.joints]
    assert ring.header["digest"] == robot.digest
    (row,) = ring.rows
    assert (row.number, row.time_s, row.dt_s, row.state) == (1, rig.now_s, 0.02, State.WALKING)
    assert set(row.faults) == {"bus-retried", "tick-overrun"}
    assert row.lateness_us == pytest.approx(250.0)
    assert row.command == pytest.approx((0.1, 0.0, 0.0))
    assert row.supply_v == pytest.approx(5.9)
    assert frame.tick is not None
    assert row.pose == pytest.approx(frame.tick.pose, rel=1e-6)
    assert row.velocity == pytest.approx(frame.tick.velocity, rel=1e-6)
    assert row.pulses_us == pytest.approx(frame.pulses_us, rel=1e-6)
    assert row.joints_rad == pytest.approx(frame.joints_rad, rel=1e-6)


def test_a_joint_that_sleeps_is_nan(tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, juniper())
    rig = Rig(juniper())
    rig.ask("rest")
    record(recorder, rig, 20)
    recorder.close()
    row = read_ring(tmp_path / RING_NAME).rows[-1]
    assert row.state is State.WAKING
    assert [math.isnan(pulse) for pulse in row.pulses_us] == [False] * 2 + [True] * 10


def test_the_ring_keeps_the_last_minute_and_no_more(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "KEPT_S", 0.5)
    rig, path = recorded(tmp_path, juniper(), 120)
    rows = read_ring(path).rows
    assert len(rows) == 50
    assert [row.number for row in rows] == list(range(71, 121))
    assert rows[-1].time_s == rig.now_s


@pytest.fixture(scope="module")
def five_rows(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """A ring of five rows that has gone round: rows 6, 7, 3, 4, 5 in this order."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "KEPT_S", 0.05)
        _, path = recorded(tmp_path_factory.mktemp("ring"), juniper(), 7)
    data = path.read_bytes()
    assert (len(data) - HEADER_BYTES) % 5 == 0
    return data


def test_a_file_cut_at_any_byte_gives_every_whole_row(five_rows: bytes, tmp_path: Path) -> None:
    row_bytes = (len(five_rows) - HEADER_BYTES) // 5
    cut = tmp_path / "cut"
    cut.write_bytes(five_rows)
    for length in range(len(five_rows), -1, -1):
        os.truncate(cut, length)
        if length < HEADER_BYTES:
            with pytest.raises(ServiceError, match="recording"):
                read_ring(cut)
            continue
        whole = (length - HEADER_BYTES) // row_bytes
        assert [row.number for row in read_ring(cut).rows] == sorted([6, 7, 3, 4, 5][:whole])


@given(slot=st.integers(0, 4), offset=st.integers(0, 10_000), bit=st.integers(0, 7))
@examples(200)
def test_a_flipped_bit_costs_its_row_and_no_other(
    five_rows: bytes, tmp_path_factory: pytest.TempPathFactory, slot: int, offset: int, bit: int
) -> None:
    data = bytearray(five_rows)
    row_bytes = (len(data) - HEADER_BYTES) // 5
    data[HEADER_BYTES + slot * row_bytes + offset % row_bytes] ^= 1 << bit
    path = tmp_path_factory.getbasetemp() / "flipped"
    path.write_bytes(data)
    numbers = [6, 7, 3, 4, 5]
    del numbers[slot]
    assert [row.number for row in read_ring(path).rows] == sorted(numbers)


@pytest.mark.parametrize("data", [b"", b"\0" * 100, b"\0" * 20000, b"hobnail\x01" + b"\xff" * 20000])
def test_what_is_no_recording_is_said_so(data: bytes, tmp_path: Path) -> None:
    path = tmp_path / RING_NAME
    path.write_bytes(data)
    with pytest.raises(ServiceError, match="not a recording"):
        read_ring(path)
    assert last_state(path) is None
    assert last_posture(tmp_path, juniper()) is None


def test_the_file_outlives_a_process_that_never_closed_it(tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, juniper())
    rig = Rig(juniper())
    rig.walk()
    record(recorder, rig, 10)
    # Not closed, not flushed: the pages are the file's own.
    assert len(read_ring(tmp_path / RING_NAME).rows) == 10
    recorder.close()


def test_the_last_posture_survives_a_restart(tmp_path: Path) -> None:
    rig, _ = recorded(tmp_path, juniper(), 10)
    posture = last_posture(tmp_path, juniper())
    assert rig.machine.body.last_rad is not None
    assert posture == pytest.approx(rig.machine.body.last_rad, abs=1e-6)
    # A second start, and a third with nothing moved in between: still known.
    Recorder(tmp_path, juniper()).close()
    Recorder(tmp_path, juniper()).close()
    assert last_posture(tmp_path, juniper()) == posture


def test_the_posture_of_joints_that_did_not_wake_comes_from_older_rows(tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, juniper())
    rig = Rig(juniper())
    rig.ask("rest")
    rig.go(3.0)
    record(recorder, rig, 3)
    rig.ask("off")
    rig.go(0.1)
    rig.ask("rest")
    record(recorder, rig, 5)
    recorder.close()
    posture = last_posture(tmp_path, juniper())
    assert posture is not None
    assert len(posture) == 12
    assert all(map(math.isfinite, posture))


def test_the_posture_of_another_configuration_is_not_used(tmp_path: Path) -> None:
    recorded(tmp_path, juniper(), 5)
    assert last_posture(tmp_path, replace(juniper(), digest="another")) is None
    assert last_posture(tmp_path, bramble()) is None


def test_a_ring_with_rows_is_kept_and_an_interruption_noticed(tmp_path: Path) -> None:
    _, path = recorded(tmp_path, juniper(), 5)
    data = path.read_bytes()
    recorder = Recorder(tmp_path, juniper())
    recorder.close()
    assert recorder.was_interrupted
    assert (tmp_path / PREVIOUS_NAME).read_bytes() == data
    again = Recorder(tmp_path, juniper())
    again.close()
    assert not again.was_interrupted
    assert (tmp_path / PREVIOUS_NAME).read_bytes() == data


def test_an_orderly_end_is_no_interruption(tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, juniper())
    rig = Rig(juniper())
    rig.walk()
    rig.ask("off")
    while rig.state is not State.OFF:
        record(recorder, rig, 1)
    recorder.close()
    assert last_state(tmp_path / RING_NAME) is State.RESTING
    after = Recorder(tmp_path, juniper())
    after.close()
    assert not after.was_interrupted


def test_what_is_cut_or_damaged_is_counted(five_rows: bytes, tmp_path: Path) -> None:
    path = tmp_path / "ring"
    path.write_bytes(five_rows)
    ring = read_ring(path)
    assert (ring.damaged, ring.missing_bytes) == (0, 0)
    path.write_bytes(five_rows[:-10])
    ring = read_ring(path)
    assert (len(ring.rows), ring.damaged, ring.missing_bytes) == (4, 0, 10)
    path.write_bytes(five_rows[:-1] + bytes((five_rows[-1] ^ 1,)))
    ring = read_ring(path)
    assert (len(ring.rows), ring.damaged, ring.missing_bytes) == (4, 1, 0)


def with_header(data: bytes, **changes: object) -> bytes:
    """The same ring with another header, its checksum right."""
    _, length, _ = module._HEADER.unpack_from(data)
    header = json.loads(data[module._HEADER.size :][:length])
    text = json.dumps({**header, **changes}).encode()
    head = module._HEADER.pack(module.MAGIC, len(text), zlib.crc32(text)) + text
    return head.ljust(HEADER_BYTES, b"\0") + data[HEADER_BYTES:]


def test_states_and_faults_are_those_of_the_program_that_wrote_them(five_rows: bytes, tmp_path: Path) -> None:
    path = tmp_path / "ring"
    states = [str(state) for state in State]
    walking, off = states.index("walking"), states.index("off")
    states[walking], states[off] = states[off], states[walking]
    path.write_bytes(with_header(five_rows, states=states))
    assert {row.state for row in read_ring(path).rows} == {State.OFF}


@pytest.mark.parametrize(
    "changes",
    [
        {"joints": None},
        {"joints": [1, 2]},
        {"states": "x" * 3, "run": 7},
        {"period_s": 0},
        {"period_s": "fast"},
        {"wall_offset_s": None},
    ],
)
def test_a_header_that_makes_no_sense_is_no_recording(
    changes: dict[str, object], five_rows: bytes, tmp_path: Path
) -> None:
    path = tmp_path / "ring"
    path.write_bytes(with_header(five_rows, **changes))
    with pytest.raises(ServiceError, match="not a recording"):
        read_ring(path)


def test_rows_in_a_state_that_nobody_knows_are_left_out(five_rows: bytes, tmp_path: Path) -> None:
    path = tmp_path / "ring"
    path.write_bytes(with_header(five_rows, states=["dancing"] * 9))
    ring = read_ring(path)
    assert (ring.rows, ring.damaged) == ((), 5)


def test_the_ring_names_its_run_and_its_log(tmp_path: Path) -> None:
    Recorder(tmp_path, juniper(), "a1b2", tmp_path / "log").close()
    header = read_ring(tmp_path / RING_NAME).header
    assert (header["run"], header["log_dir"]) == ("a1b2", str(tmp_path / "log"))
