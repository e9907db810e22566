"""Files of a record: whole lines and rows from a file cut anywhere, garbage refused, the cut told."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.errors import EX_DATAERR, RecordError
from hobnail.service.recorder import HEADER_BYTES, RING_NAME
from hobnail.service.writer import LOG_NAME
from hobnail.workshop.log import reading
from hobnail.workshop.log.reading import Material, read
from robots import examples
from workshop.log.records import Life


@pytest.fixture(scope="module")
def record(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A short life: stood up, walked, was stopped."""
    directory = tmp_path_factory.mktemp("record")
    life = Life(directory)
    life.stand()
    life.walk(0.5)
    life.ask("stop", 2, category=0, reason="smoke")
    life.go(0.1)
    life.recorder.close()
    return directory


def read_bytes(path: Path, data: bytes | bytearray) -> Material:
    path.write_bytes(data)
    return read([path], strict=True)


def test_a_log_cut_at_any_byte_gives_every_whole_line_and_tells_the_cut(record: Path, tmp_path: Path) -> None:
    data = (record / LOG_NAME).read_bytes()
    path = tmp_path / LOG_NAME
    ends = [k + 1 for k, byte in enumerate(data) if byte == ord("\n")]
    assert len(ends) > 8
    for length in range(ends[0] - 1, len(data) + 1):
        material = read_bytes(path, data[:length])
        # A line without its line feed is whole all the same.
        whole = sum(1 for end in ends if end - 1 <= length)
        assert len(material.events) == whole
        is_cut = length not in ends and length + 1 not in ends
        assert [note for note in material.notes if "cut off" in note] == material.notes
        assert bool(material.notes) == is_cut


def test_a_ring_cut_at_a_row_gives_every_whole_tick_and_tells_the_cut(record: Path, tmp_path: Path) -> None:
    data = (record / RING_NAME).read_bytes()
    path = tmp_path / "copy.ring"
    whole = read_bytes(path, data)
    assert whole.notes == []
    rows = len(whole.rings[0][1].rows)
    row_bytes = (len(data) - HEADER_BYTES) // 6000
    for length in (HEADER_BYTES, HEADER_BYTES + 17, HEADER_BYTES + 5 * row_bytes, len(data) - 1):
        material = read_bytes(path, data[:length])
        assert len(material.rings[0][1].rows) == min(rows, (length - HEADER_BYTES) // row_bytes)
        (note,) = material.notes
        assert f"{len(data) - length} bytes are cut off its end" in note
    for length in (0, 100, HEADER_BYTES - 1):
        with pytest.raises(RecordError, match="damaged at its beginning"):
            read_bytes(path, data[:length])


def test_the_newest_row_may_be_half_written_others_are_told(record: Path, tmp_path: Path) -> None:
    data = bytearray((record / RING_NAME).read_bytes())
    row_bytes = (len(data) - HEADER_BYTES) // 6000
    path = tmp_path / "copy.ring"
    rows = len(read_bytes(path, data).rings[0][1].rows)
    newest = HEADER_BYTES + (rows - 1) * row_bytes
    data[newest + 20] ^= 1
    assert read_bytes(path, data).notes == []
    data[HEADER_BYTES + 3 * row_bytes + 20] ^= 1
    (note,) = read_bytes(path, data).notes
    assert "2 damaged ticks are left out" in note


@pytest.mark.parametrize(
    "data",
    [
        b"\0" * 50,
        b"hello\nworld\n",
        b"[]\n",
        b'{"time": "yesterday"}\n',
        b'{"time": "2027-01-15T08:00:00+00:00", "monotonic_s": "x", "kind": "a", "text": "b"}\n',
        b'{"time": "2027-01-15T08:00:00+00:00", "monotonic_s": 1e999, "kind": "a", "text": "b"}\n',
        b'{"time": "2027-01-15T08:00:00+00:00", "monotonic_s": 1, "kind": [], "text": "b"}\n',
        b"[" * 100_000 + b"\n",
        b"\xff\xfe\n" * 3,
        b"hobnail\x01" + b"\xff" * 9000,
    ],
)
def test_garbage_is_refused_by_its_name(data: bytes, tmp_path: Path) -> None:
    with pytest.raises(RecordError, match=r"copy.*name an events\.log or a \.ring file") as caught:
        read_bytes(tmp_path / "copy", data)
    assert caught.value.exit_code == EX_DATAERR


def test_an_empty_log_is_a_log_without_lines(tmp_path: Path) -> None:
    assert read_bytes(tmp_path / LOG_NAME, b"").events == []


def test_what_is_no_file_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(RecordError, match="is no file"):
        read([tmp_path / "pipe"], strict=True)
    with pytest.raises(FileNotFoundError):
        read([tmp_path / "none"], strict=True)


def test_a_file_far_too_long_is_not_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(reading, "MOST_BYTES", 1000)
    with pytest.raises(RecordError, match="has 1001 bytes, allowed 1000"):
        read_bytes(tmp_path / "long", b"x" * 1001)


def test_one_damaged_file_does_not_hide_the_others(record: Path, tmp_path: Path) -> None:
    (tmp_path / "broken.ring").write_bytes(b"?" * 5000)
    material = read([tmp_path / "broken.ring", record / LOG_NAME], strict=False)
    assert material.events
    assert material.sources == [record / LOG_NAME]
    assert len(material.notes) == 1
    with pytest.raises(RecordError, match="nothing of the record can be read"):
        read([tmp_path / "broken.ring"], strict=False)


@given(place=st.floats(0, 1, exclude_max=True), damage=st.binary(min_size=1, max_size=40))
@examples(200)
def test_damage_anywhere_in_a_log_costs_the_lines_that_it_hits(
    record: Path, tmp_path_factory: pytest.TempPathFactory, place: float, damage: bytes
) -> None:
    data = (record / LOG_NAME).read_bytes()
    start = int(place * len(data))
    hurt = data[:start] + damage + data[start + len(damage) :]
    path = tmp_path_factory.getbasetemp() / "hurt.log"
    lines = data.split(b"\n")
    hit = data[start : start + len(damage)].count(b"\n") + damage.count(b"\n") + 2
    assert len(read_bytes(path, hurt).events) >= len(lines) - 1 - hit


def test_damaged_lines_in_the_middle_are_told(record: Path, tmp_path: Path) -> None:
    first, *rest = (record / LOG_NAME).read_bytes().splitlines(keepends=True)
    material = read_bytes(tmp_path / LOG_NAME, b"".join([first, b"{?}\n", b"\n", *rest]))
    assert len(material.events) == 1 + len(rest)
    assert material.notes == [f"{tmp_path / LOG_NAME}: 1 damaged lines are left out"]


def test_a_log_in_another_directory_is_found_by_the_ring(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.recorder.close()
    material = read([tmp_path / RING_NAME], strict=True)
    reading.follow(material)
    assert [path.name for path in material.sources] == [RING_NAME, LOG_NAME]
    entry = json.loads((tmp_path / LOG_NAME).read_text().splitlines()[0])
    assert material.events[0].text == entry["text"]
