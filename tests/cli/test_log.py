"""`hobnail log`: what it prints, as text, JSON and a table; where it looks; and every way it can fail."""

from __future__ import annotations

import csv
import json
import math
import os
import signal
import socket
import struct
import subprocess
import sys
import zlib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from command_line import hobnail_on_a_terminal, subprocess_environment
from hobnail.cli.main import main
from hobnail.service.archive import RECORDINGS
from hobnail.service.recorder import HEADER_BYTES, RING_NAME, _row_struct
from hobnail.service.writer import LOG_NAME
from hobnail.workshop.log import places
from robots import examples
from workshop.log.records import Life

Output = pytest.CaptureFixture[str]


@pytest.fixture(autouse=True)
def utc(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Local time is UTC, and no service of this machine is looked at."""
    import time

    monkeypatch.setenv("TZ", "UTC")
    time.tzset()
    for name in ("RUNTIME_DIRECTORY", "LOGS_DIRECTORY", "STATE_DIRECTORY"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setenv("HOBNAIL_SOCKET", str(tmp_path / "hobnail.sock"))


def stopped(directory: Path) -> Life:
    """It walked, and somebody stopped it."""
    life = Life(directory)
    life.stand()
    life.walk(1.0)
    life.ask("stop", 2, category=0, reason="smoke at a knee")
    life.go(0.5)
    return life


def test_the_incident_comes_first_then_the_story_then_the_tick_before(tmp_path: Path, capsys: Output) -> None:
    stopped(tmp_path)
    assert main(["log"]) == 0
    out = capsys.readouterr().out
    lines = out.splitlines()
    assert lines[0] == f"juniper; record in {tmp_path}"
    assert "times are local (UTC+0000)" in lines[1]
    order = [
        "incident   2027-01-15 08:00:0",
        "cause      walking -> stopped, a stop of category 0: smoke at a knee (client 2)",
        "by         client 2 (user root, pid 1002)",
        "next       look at the robot, then `hobnail reset`, then `hobnail stand`",
        "client 1 (user root, pid 1001): walk +0.100 m/s ahead",
        "client 2 (user root, pid 1002): stop, category 0: smoke at a knee",
        "the tick 10 ms before",
        "asked      +0.100 m/s ahead",
        "left-front ",
    ]
    found = [out.index(text) for text in order]
    assert found == sorted(found)


def test_it_fits_eighty_columns_on_a_terminal(tmp_path: Path) -> None:
    stopped(tmp_path)
    code, shown = hobnail_on_a_terminal("log")
    assert code == 0
    assert max(map(len, shown.splitlines())) < 80
    assert "\x1b" not in shown


def test_as_json(tmp_path: Path, capsys: Output) -> None:
    stopped(tmp_path)
    assert main(["log", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert set(told) == {"sources", "notes", "runs", "incident", "entries"}
    assert told["notes"] == []
    assert [run["robot"] for run in told["runs"]] == ["juniper"]
    incident = told["incident"]
    assert incident["alarms"][0]["kind"] == "stop"
    assert incident["asked"]["who"].startswith("client 2")
    assert incident["over"] is None
    assert incident["tick"]["state"] == "walking"
    assert len(incident["tick"]["pulses_us"]) == 12
    assert {"time_utc", "monotonic_s", "kind", "text", "who", "grade", "count"} <= set(told["entries"][0])


def test_as_a_table(tmp_path: Path, capsys: Output) -> None:
    stopped(tmp_path)
    assert main(["log", "--csv", str(tmp_path / "ticks.csv")]) == 0
    rows = list(csv.DictReader((tmp_path / "ticks.csv").read_text().splitlines()))
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err == f"{len(rows)} ticks written to {tmp_path / 'ticks.csv'}\n"
    assert main(["log", "--csv", "-", "--last", "0.7"]) == 0
    few = list(csv.DictReader(capsys.readouterr().out.splitlines()))
    assert 0 < len(few) < 75 < len(rows)
    assert main(["log", "--csv", str(tmp_path / "no" / "x.csv")]) == 66
    assert "no/x.csv: No such file or directory" in capsys.readouterr().err


def test_a_span_of_time(tmp_path: Path, capsys: Output) -> None:
    life = Life(tmp_path)
    life.stand()
    life.go(30.0)
    life.ask("gait", 1, name="crawl")
    life.go(30.0)
    life.ask("gait", 1, name="trot")
    counts = []
    for words in (
        ["--last", "1"],
        ["--last", "35"],
        ["--since", "08:00:20"],
        ["--since", "2027-01-15T08:00:50+00:00"],
        ["--since", "08:59"],
        ["--all"],
        [],
    ):
        assert main(["log", *words]) == 0
        out = capsys.readouterr().out
        counts.append((out.count("gait "), out.count("stand\n")))
        assert ("--all" in out) == (words != ["--all"])
    assert counts == [(1, 0), (2, 0), (2, 0), (1, 0), (0, 0), (2, 1), (2, 0)]


@pytest.mark.parametrize("text", ["99", "soon", "25:00", "2027-13-01T00:00"])
def test_a_time_that_is_none_is_refused(text: str, capsys: Output) -> None:
    assert main(["log", "--since", text]) == 64
    assert f"--since is '{text}', allowed a time such as 14:30" in capsys.readouterr().err


def test_a_copy_of_another_machine_is_read(tmp_path: Path, capsys: Output) -> None:
    robot = tmp_path / "from-the-robot"
    for name in ("log", "state", "run"):
        (robot / name).mkdir(parents=True)
    life = stopped(robot / "run")
    (robot / "run" / LOG_NAME).rename(robot / "log" / LOG_NAME)
    life.directory = robot / "state"
    (robot / "state" / RECORDINGS).mkdir()
    (robot / "state" / RECORDINGS / "one-stop.ring").write_bytes((robot / "run" / RING_NAME).read_bytes())
    (robot / "run" / RING_NAME).unlink()
    assert main(["log", str(robot)]) == 0
    out = capsys.readouterr().out
    assert "smoke at a knee" in out
    assert "the tick 10 ms before" in out
    assert "cut off" not in out
    assert main(["log", str(robot / "log" / LOG_NAME)]) == 0
    assert "of the pulses before the incident nothing is kept" in capsys.readouterr().out


def test_files_that_are_none_and_no_files_are_refused(tmp_path: Path, capsys: Output) -> None:
    (tmp_path / "x").write_text("hello\n")
    (tmp_path / "empty").mkdir()
    for name, code, told in (
        ("x", 65, "has no line of hobnail's log: name an events.log or a .ring file"),
        ("none", 66, "No such file"),
        ("empty", 66, f"no record in it; one has {LOG_NAME}"),
    ):
        assert main(["log", str(tmp_path / name)]) == code
        err = capsys.readouterr().err
        assert told in err
        assert name in err
        assert len(err.splitlines()) == 1


def test_without_a_record_it_says_where_it_looked_and_what_to_do(tmp_path: Path, capsys: Output) -> None:
    assert main(["log"]) == 66
    err = capsys.readouterr().err
    assert f"looked in {tmp_path}. A record begins when `hobnail run`" in err


def test_a_record_that_may_not_be_read_says_which_group(
    capsys: Output, monkeypatch: pytest.MonkeyPatch
) -> None:
    def forbidden(path: object) -> list[str]:
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(os, "listdir", forbidden)
    assert main(["log"]) == 77
    assert "join the group of the service (`usermod -aG hobnail USER`" in capsys.readouterr().err


def test_a_damaged_part_is_told_and_the_rest_is_read(tmp_path: Path, capsys: Output) -> None:
    stopped(tmp_path)
    with (tmp_path / LOG_NAME).open("a") as log:
        log.write('{"time": "2027-01')
    os.truncate(tmp_path / RING_NAME, 40_000)
    assert main(["log"]) == 0
    out = capsys.readouterr().out
    assert "its last line is cut off" in out
    assert "bytes are cut off its end" in out
    assert "smoke at a knee" in out


@given(
    row=st.integers(0, 3),
    numbers=st.dictionaries(
        st.integers(1, 40), st.sampled_from([math.nan, math.inf, -1e38, 1e38, 0.0]), min_size=1
    ),
    time_s=st.sampled_from([math.nan, math.inf, -1e300, 1e300, 0.0]) | st.none(),
)
@examples(60)
def test_numbers_that_make_no_sense_are_no_bug(
    row: int, numbers: dict[int, float], time_s: float | None, tmp_path_factory: pytest.TempPathFactory
) -> None:
    """Rows with a right checksum, whatever is in them."""
    directory = tmp_path_factory.mktemp("odd")
    life = Life(directory)
    life.stand()
    life.recorder.close()
    path = directory / RING_NAME
    data = bytearray(path.read_bytes())
    form = _row_struct(12)
    start = HEADER_BYTES + row * (form.size + 4)
    values = list(form.unpack_from(data, start))
    for index, value in numbers.items():
        if index < len(values) and index not in (3, 4):  # bits and state are whole numbers
            values[index] = value
    if time_s is not None:
        values[1] = time_s
    packed = form.pack(*values)
    data[start : start + form.size + 4] = packed + struct.pack("<I", zlib.crc32(packed))
    path.write_bytes(data)
    for words in (["--json"], ["--csv", os.devnull], ["--all"]):
        assert main(["log", str(path), *words]) == 0


def test_where_a_service_keeps_it() -> None:
    (place,) = places.of_service("/run/hobnail@bramble/hobnail.sock", {})
    assert [str(path) for path in place] == [
        "/run/hobnail@bramble",
        "/var/log/hobnail@bramble",
        "/var/lib/hobnail@bramble",
    ]
    found = places.of_service(None, {"XDG_RUNTIME_DIR": "/run/user/7"})
    runtime = [str(place[0]) for place in found]
    assert "/run/hobnail" in runtime
    assert "/run/user/7" in runtime
    assert [str(p) for p in places.of_service(None, {"HOBNAIL_SOCKET": "/tmp/x/y.sock"})[0]] == ["/tmp/x"]


def test_while_something_listens_on_the_socket_the_end_of_the_files_is_no_end(
    tmp_path: Path, capsys: Output
) -> None:
    life = Life(tmp_path)
    life.stand()
    assert main(["log"]) == 0
    assert "the program ends here without a word" in capsys.readouterr().out
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as listener:
        listener.bind(str(tmp_path / "hobnail.sock"))
        listener.listen()
        assert main(["log"]) == 0
    assert "without a word" not in capsys.readouterr().out


def test_a_real_service_that_is_read_while_it_runs_and_after_sigkill(tmp_path: Path, capsys: Output) -> None:
    from hobnail.service.client import Client
    from robots import CONFIG

    path = tmp_path / "hobnail.sock"
    process = subprocess.Popen(
        [*(sys.executable, "-m", "hobnail.cli.main", "run", str(CONFIG / "juniper.yaml")), "--plain"],
        env=subprocess_environment(),
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
    )
    with process:
        try:
            assert process.stderr is not None
            while "socket" not in process.stderr.readline():
                assert process.poll() is None
            with Client(path, timeout_s=60.0) as client:
                client.stand()
                while client.state()["state"] in ("off", "waking"):
                    pass
                assert main(["log", "--json"]) == 0
                told = json.loads(capsys.readouterr().out)
                assert told["incident"] is None
                assert told["runs"][0]["ticks"] > 0
                process.send_signal(signal.SIGKILL)
                process.wait()
        finally:
            process.kill()
    assert main(["log", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["incident"]["alarms"][0]["kind"] == "cut-off"
    assert [entry["text"] for entry in told["entries"] if entry["kind"] == "command"] == ["stand"]
    assert any(entry["text"] == "waking -> resting" for entry in told["entries"])
