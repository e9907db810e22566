"""The writer's thread and the event log: bounded, in order, and telling what was dropped."""

from __future__ import annotations

import json
import os
import pwd
from pathlib import Path
from threading import Event

from hobnail.service.link import Peer
from hobnail.service.states import LOCAL_CLIENT
from hobnail.service.writer import LOG_NAME, EventLog, Writer

WAIT_S = 10.0  # a bound for a broken test, not a time that anything takes


def texts(path: Path) -> list[str]:
    return [json.loads(line)["text"] for line in path.read_text().splitlines()]


def test_lines_are_appended_in_order_with_both_clocks(tmp_path: Path) -> None:
    (tmp_path / LOG_NAME).write_text('{"text": "from before"}\n')
    seen: list[str] = []
    writer = Writer("test")
    log = EventLog(writer, tmp_path, (seen.append,))
    for number in range(50):
        log.event("test", f"line {number}", 100.0 + number)
    assert writer.close(WAIT_S)
    assert texts(tmp_path / LOG_NAME) == ["from before", *(f"line {number}" for number in range(50))]
    assert seen == [f"line {number}" for number in range(50)]
    entry = json.loads((tmp_path / LOG_NAME).read_text().splitlines()[-1])
    assert entry["monotonic_s"] == 149.0
    assert entry["time"].endswith("+00:00")


def test_a_full_queue_drops_counts_and_tells(tmp_path: Path) -> None:
    begun, let_go = Event(), Event()

    def stalled(_: str) -> None:
        begun.set()
        assert let_go.wait(WAIT_S)

    writer = Writer("test", length=10)
    log = EventLog(writer, tmp_path, (stalled,))
    log.event("test", "first", 0.0)
    assert begun.wait(WAIT_S)
    for number in range(30):
        log.event("test", f"line {number}", 0.0)
    assert writer.dropped == 20
    let_go.set()
    sent = Event()
    # Puts fail until the thread has taken one off.
    while not writer.put(sent.set):
        assert begun.wait(WAIT_S)
    assert sent.wait(WAIT_S)
    log.event("test", "through again", 1.0)
    assert writer.close(WAIT_S)
    lines = texts(tmp_path / LOG_NAME)
    assert lines[:11] == ["first", *(f"line {number}" for number in range(10))]
    assert "lines were dropped" in lines[-2]
    assert lines[-1] == "through again"


def test_a_job_that_fails_ends_nothing(tmp_path: Path) -> None:
    writer = Writer("test")
    log = EventLog(writer, tmp_path / "not there", ())
    log.event("test", "cannot be written", 0.0)
    done = Event()
    writer.put(done.set)
    assert done.wait(WAIT_S)
    assert writer.failed == 1
    assert writer.close(WAIT_S)


def test_a_line_that_cannot_be_written_is_shown_all_the_same(tmp_path: Path) -> None:
    seen: list[str] = []
    writer = Writer("test")
    EventLog(writer, tmp_path / "not there", (seen.append,)).event("test", "disk full", 0.0)
    assert writer.close(WAIT_S)
    assert seen == ["disk full"]


def test_a_long_log_is_begun_anew(tmp_path: Path) -> None:
    writer = Writer("test")
    log = EventLog(writer, tmp_path, limit_bytes=1000)
    for number in range(30):
        log.event("test", f"line {number}", 0.0)
    assert writer.close(WAIT_S)
    kept = texts(tmp_path / f"{LOG_NAME}.1")
    rest = texts(tmp_path / LOG_NAME) if (tmp_path / LOG_NAME).exists() else []
    assert (kept + rest)[-1] == "line 29"
    assert (tmp_path / f"{LOG_NAME}.1").stat().st_size < 1200


def test_close_does_not_wait_for_a_job_that_hangs() -> None:
    let_go = Event()
    writer = Writer("test")
    writer.put(lambda: let_go.wait(WAIT_S))
    assert not writer.close(0.01)
    let_go.set()
    assert writer.close(WAIT_S)


def test_a_line_that_was_cut_costs_no_other(tmp_path: Path) -> None:
    whole = '{"text": "whole"}\n'
    (tmp_path / LOG_NAME).write_text(whole + '{"text": "cut by a cra')
    writer = Writer("test")
    log = EventLog(writer, tmp_path)
    log.event("test", "after", 1.0)
    log.event("test", "and another", 2.0)
    assert writer.close(WAIT_S)
    lines = (tmp_path / LOG_NAME).read_text().splitlines()
    assert [json.loads(lines[k])["text"] for k in (0, 2, 3)] == ["whole", "after", "and another"]
    assert len(lines) == 4


def test_a_line_says_in_which_run_and_for_whom(tmp_path: Path) -> None:
    seen: list[str] = []
    writer = Writer("test")
    log = EventLog(writer, tmp_path, (seen.append,), run="a1b2")
    log.event("command", "stand", 1.0, client=3, peer=Peer(42, os.getuid(), os.getgid()))
    log.event("command", "stand", 1.0, client=4, peer=Peer(43, 3_999_999_999 % 2**31, 0))
    log.event("command", "walk a route", 1.0, client=LOCAL_CLIENT)
    assert writer.close(WAIT_S)
    user = pwd.getpwuid(os.getuid()).pw_name
    assert seen == [
        f"client 3 (user {user}, pid 42): stand",
        f"client 4 (user {3_999_999_999 % 2**31}, pid 43): stand",
        "the service itself: walk a route",
    ]
    entry = json.loads((tmp_path / LOG_NAME).read_text().splitlines()[0])
    told = {key: entry[key] for key in ("run", "text", "client", "pid", "user")}
    assert told == {"run": "a1b2", "text": "stand", "client": 3, "pid": 42, "user": user}
