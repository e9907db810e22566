"""The story of a run, and its last incident, from records that the real machine left."""

from __future__ import annotations

import csv
import io
import math
from pathlib import Path

import pytest

from hobnail.service.recorder import PREVIOUS_NAME, RING_NAME
from hobnail.service.writer import LOG_NAME
from hobnail.workshop.log.incident import Incident, around, last, last_incident, tick_at
from hobnail.workshop.log.places import named
from hobnail.workshop.log.reading import read
from hobnail.workshop.log.runs import Run, put_together
from hobnail.workshop.log.sheet import HEADS, write
from hobnail.workshop.log.story import Entry, entries, fold
from robots import juniper
from workshop.log.records import BEGAN_WALL_S, Life


def told(*paths: Path, is_over: bool = True) -> tuple[list[Run], list[Entry]]:
    runs = put_together(read(named(map(str, paths)), strict=True))
    return runs, [entry for run in runs for entry in entries(run, is_over=is_over or run is not runs[-1])]


def incident(*paths: Path) -> Incident:
    found = last_incident(told(*paths, is_over=False)[1])
    assert found is not None
    return found


def texts(story: list[Entry], *kinds: str) -> list[str]:
    return [entry.text for entry in story if entry.kind in kinds]


def test_a_stop_is_told_with_who_asked_for_it_and_what_was_sent(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.walk(1.0)
    sent = life.rig.frame
    at_s = life.rig.now_s
    life.ask("stop", 2, category=0, reason="smoke at a knee")
    life.go(0.5)
    life.ask("walk", 1, vx=0.1)
    life.recorder.close()
    runs, story = told(tmp_path, is_over=False)
    found = incident(tmp_path)
    assert found.cause.text == "walking -> stopped, a stop of category 0: smoke at a knee (client 2)"
    assert found.asked is not None
    assert found.asked.who.startswith("client 2 (user ")
    assert found.over is None
    assert "hobnail reset" in found.next
    assert "refused walk: stopped: smoke at a knee (client 2)" in texts(story, "command")[-1]
    row = tick_at(runs, found.cause)
    assert row is not None
    assert sent is not None
    assert row.time_s == pytest.approx(at_s)
    assert row.command == pytest.approx((0.1, 0.0, 0.0))
    assert row.pulses_us == pytest.approx(sent.pulses_us)


def test_a_reset_ends_the_incident(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.ask("stop", 2, category=1, reason="")
    life.go(3.0)
    life.ask("reset", 2)
    life.go(0.1)
    found = incident(tmp_path)
    assert found.cause.text.startswith("standing -> stopping, a stop of category 1")
    assert found.over is not None
    assert found.over.text == "stopped -> off"
    assert found.next == ""


def test_of_faults_in_a_chain_the_first_is_the_cause_and_its_advice_is_given(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.rig.machine.report("bus-retried", life.rig.now_s, "errno 121")
    life.go(0.1)
    life.rig.machine.report("bus-error", life.rig.now_s, "board main: no answer")
    life.go(0.05)
    life.rig.machine.report("supply-unread", life.rig.now_s)
    life.go(0.1)
    found = incident(tmp_path)
    assert [alarm.kind for alarm in found.alarms] == ["fault", "stop"]
    assert found.cause.text == "bus-error (cut): board main: no answer"
    assert found.alarms[1].text == "standing -> stopped, a stop of category 0: fault bus-error"
    assert found.next == found.cause.next
    assert "check the board's power" in found.next
    assert found.asked is None


def test_a_lost_commander_is_an_incident_until_a_fresh_command(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.walk(0.5)
    life.go(2.0)
    assert incident(tmp_path).over is None
    life.ask("stand")
    life.go(0.1)
    found = incident(tmp_path)
    assert found.cause.name == "commander-lost"
    assert found.over is not None
    assert found.over.name == "commander-lost"


def test_a_program_that_was_killed_in_mid_walk_is_an_incident(tmp_path: Path) -> None:
    first = Life(tmp_path)
    first.stand()
    first.walk(0.5)
    second = Life(tmp_path, "second", began_s=first.rig.now_s + 3.0)
    second.go(0.1)
    _, story = told(tmp_path, is_over=False)
    (cut,) = [entry for entry in story if entry.kind == "cut-off"]
    assert cut.run == "first"
    assert "its last state is walking" in cut.text
    found = incident(tmp_path)
    assert found.cause == cut
    assert found.over is not None
    assert (found.over.run, found.over.kind) == ("second", "start")
    row = tick_at(told(tmp_path)[0], cut)
    assert row is not None
    assert row.state == "walking"


def test_a_program_that_ended_at_rest_is_none_and_neither_is_one_that_still_runs(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    assert last_incident(told(tmp_path, is_over=False)[1]) is None
    assert last_incident(told(tmp_path, is_over=True)[1]) is not None
    life.end()
    assert last_incident(told(tmp_path, is_over=True)[1]) is None


def test_lying_down_without_being_asked_has_its_reason(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.go(juniper().safety.idle_rest_s + 0.1)
    life.ask("stand")
    life.go(1.0)
    life.rig.machine.power_down("SIGTERM")
    life.go(0.1)
    states = texts(told(tmp_path)[1], "state")
    assert f"standing -> lowering: no command for {juniper().safety.idle_rest_s:g} s" in states
    assert "lowering -> rising" in states
    assert states[-1] == "standing -> lowering: SIGTERM"


def test_a_stop_on_the_way_down_is_its_own_reason(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.rig.machine.power_down(reason="no command for 300 s")
    life.go(0.1)
    life.ask("stop", 2, category=0, reason="smoke")
    life.ask("reset", 2)
    life.go(0.1)
    assert texts(told(tmp_path)[1], "state", "stop")[-3:] == [
        "standing -> lowering: no command for 300 s",
        "lowering -> stopped, a stop of category 0: smoke (client 2)",
        "stopped -> off",
    ]


def test_skipped_ticks_are_counted_from_the_rows_and_told_together(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    for lateness_s in (0.012, 0.035, 0.004, 0.011):
        life.lateness_s = lateness_s
        life.go(0.1)
    life.go(2.0)
    life.lateness_s = 0.05
    life.go(0.1)
    first, second = texts(told(tmp_path)[1], "skipped")
    assert first == "5 ticks skipped within 0.30 s: 3 were late, by 35.0 ms at worst"
    assert second == "5 tick(s) skipped: one was 50.0 ms late"


def test_a_skipped_tick_that_the_log_tells_is_not_told_twice(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.lateness_s = 0.012
    life.rig.machine.report("tick-overrun", life.rig.now_s + 0.01, "12 ms late")
    life.go(0.1)
    story = told(tmp_path)[1]
    assert texts(story, "skipped") == []
    assert texts(story, "fault") == ["tick-overrun (warn): 12 ms late"]


def test_repeated_lines_are_one_with_their_number(tmp_path: Path) -> None:
    life = Life(tmp_path)
    for k in range(50):
        life.event("client", f"client {k}: garbage")
    life.event("client", "client 60: flood")
    for _ in range(10_000):
        life.rig.machine.report("out-of-reach", life.rig.now_s, "1 feet in one tick")
    life.go(0.1)
    story = told(tmp_path)[1]
    folded = [entry for entry in fold(story) if entry.kind in ("client", "fault")]
    assert [(entry.text, entry.count) for entry in folded] == [
        ("client 0: garbage", 50),
        ("client 60: flood", 1),
        ("out-of-reach (warn): 1 feet in one tick", 10_000),
    ]
    assert math.isfinite(folded[0].until_s)


def test_from_the_ticks_alone_there_are_states_faults_and_commands(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.walk(0.5)
    life.go(1.5)
    life.ask("stop", 1, category=1, reason="not in the ticks")
    life.go(1.0)
    (tmp_path / LOG_NAME).unlink()
    runs, story = told(tmp_path)
    assert runs[0].robot == "juniper"
    seen = texts(story, "state", "stop", "command", "fault")
    assert seen[:4] == [
        "waking -> resting",
        "resting -> rising",
        "rising -> standing",
        "walk +0.100 m/s ahead, +0.000 m/s left, +0.0 deg/s",
    ]
    assert any(text.startswith("commander-lost (hold)") for text in seen)
    assert "standing -> stopping, a stop of category 1" in seen
    assert "there is no log" in texts(story, "cut-off")[0]


def test_a_wall_clock_that_is_set_is_told_and_the_order_holds(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.offset_s += 3600.0
    life.walk(0.5)
    life.offset_s -= 90_000.0
    life.ask("stop", 1, category=0, reason="")
    life.go(0.1)
    runs, story = told(tmp_path)
    assert [entry.text.split(";")[0] for entry in story if entry.kind == "clock"] == [
        "the wall clock was set by +3600.0 s",
        "the wall clock was set by -90000.0 s",
    ]
    assert [entry.monotonic_s for entry in story] == sorted(entry.monotonic_s for entry in story)
    # Ticks have the wall time of the lines around them, not that of the start.
    (run,) = runs
    walking = next(row for row in run.rows if row.state == "walking")
    assert run.wall_s(walking.time_s) == pytest.approx(
        walking.time_s + BEGAN_WALL_S - 100.0 + 3600.0, abs=1e-3
    )


def test_runs_come_in_the_order_of_the_log_whatever_the_wall_clock_said(tmp_path: Path) -> None:
    """A board without a clock of its own starts in the past, until the network tells it the time."""
    first = Life(tmp_path, "first")
    first.stand()
    second = Life(tmp_path, "second", began_s=5.0)
    second.offset_s -= 1e8
    second.event("start", "realtime")
    second.stand()
    runs, _ = told(tmp_path)
    assert [run.name for run in runs] == ["first", "second"]


def test_a_recording_and_the_ring_that_it_is_of_are_one_run(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.ask("stop", 1, category=0, reason="")
    life.go(0.1)
    kept = life.keep()
    after = Life(tmp_path, "second", began_s=life.rig.now_s + 1.0)
    after.stand()
    assert (tmp_path / PREVIOUS_NAME).exists()
    runs, _ = told(tmp_path)
    assert [run.name for run in runs] == ["first", "second"]
    numbers = [row.number for row in runs[0].rows]
    assert numbers == list(range(1, len(numbers) + 1))
    (alone,) = told(kept)[0]
    assert [row.number for row in alone.rows] == numbers


def test_around_an_incident_the_half_minute_before_is_shown(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.go(100.0)
    life.ask("gait", 1, name="crawl")
    life.go(20.0)
    life.ask("stop", 1, category=0, reason="")
    life.go(0.1)
    life.ask("reset", 1)
    life.go(20.0)
    life.ask("gait", 1, name="trot")
    story = told(tmp_path, is_over=False)[1]
    shown = around(story, last_incident(story))
    assert texts(shown, "command") == ["gait crawl", "stop, category 0", "reset"]
    assert texts(shown, "start") == []
    # Refused while it is off, and the newest line: 20 s after the reset.
    assert texts(last(story, 5.0), "command") == texts(story, "command")[-1:]


def test_without_an_incident_it_is_the_last_minute(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.go(100.0)
    life.ask("gait", 1, name="crawl")
    story = told(tmp_path, is_over=False)[1]
    assert [entry.text for entry in around(story, None)] == ["gait crawl"]
    assert around([], None) == []


def test_the_table_has_every_tick_with_its_pulses(tmp_path: Path) -> None:
    life = Life(tmp_path)
    life.stand()
    life.walk(0.5)
    life.ask("stop", 1, category=0, reason="")
    life.go(0.1)
    runs, _ = told(tmp_path / RING_NAME)
    out = io.StringIO()
    assert write(out, runs) == (len(runs[0].rows), 0)
    table = list(csv.DictReader(io.StringIO(out.getvalue())))
    assert len(table) == len(runs[0].rows)
    joints = [joint.name for joint in juniper().joints]
    assert list(table[0]) == [*HEADS, *(f"pulse_us {j}" for j in joints), *(f"angle_rad {j}" for j in joints)]
    row, cells = runs[0].rows[-1], table[-1]
    assert cells["state"] == "walking"
    assert float(cells["asked_vx_m_s"]) == pytest.approx(0.1)
    assert [float(cells[f"pulse_us {joint}"]) for joint in joints] == pytest.approx(row.pulses_us, rel=1e-5)
    # The first joints wake alone: the others have no pulse, which is no number.
    assert [table[0][f"pulse_us {joint}"] for joint in joints].count("") == len(joints) - 1
    late_s = runs[0].wall_s(row.time_s) - 0.045
    assert write(io.StringIO(), runs, late_s) == (5, 0)
