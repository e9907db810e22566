"""The commands that talk to a running robot, against the real machine and socket on fast time."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator
from functools import partial
from itertools import islice
from pathlib import Path
from typing import Any

import pytest

from fast_service import FastService
from hobnail.cli import route, waiting, walk, watch
from hobnail.cli.main import main
from hobnail.errors import FaultError, ServiceTimeoutError, StoppedError
from hobnail.service.client import Client
from snapshots import snapshot

Output = pytest.CaptureFixture[str]


@pytest.fixture
def service(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[FastService]:
    """A running robot; the commands find it, and wait by its time."""
    with FastService(tmp_path) as running:
        monkeypatch.setenv("HOBNAIL_SOCKET", str(running.path))
        by_its_time = {"clock": running.clock, "sleep": running.sleep}
        wait = partial(waiting.wait_for_state, **by_its_time)  # type: ignore[arg-type]
        monkeypatch.setattr(waiting, "wait_for_state", wait)
        monkeypatch.setattr(walk, "wait_for_state", waiting.wait_for_state)
        monkeypatch.setattr(walk, "stream", partial(walk.stream, **by_its_time))  # type: ignore[arg-type]
        yield running


def state(output: Output) -> dict[str, Any]:
    """What `hobnail state --json` prints."""
    output.readouterr()
    assert main(["state", "--json"]) == 0
    snapshot: dict[str, Any] = json.loads(output.readouterr().out)
    return snapshot


def written(tmp_path: Path, text: str) -> str:
    path = tmp_path / "route.yaml"
    path.write_text(text)
    return str(path)


def test_up_and_down_and_off(service: FastService, capsys: Output) -> None:
    assert main(["stand"]) == 0
    told = capsys.readouterr()
    assert told.out == "standing\n"
    assert told.err.split()[-1] == "standing"  # the states on the way, as far as they were seen
    assert state(capsys)["state"] == "standing"
    assert main(["rest"]) == 0
    assert capsys.readouterr().out == "resting\n"
    assert main(["off"]) == 0
    assert capsys.readouterr().out == "off\n"
    assert state(capsys)["state"] == "off"
    assert service.machine.stop_record is None


@pytest.mark.usefixtures("service")
def test_walking_for_a_time_goes_that_far_and_ends_standing(capsys: Output) -> None:
    main(["stand"])
    assert main(["walk", "--vx", "0.2", "--for", "5"]) == 0
    out = capsys.readouterr().out
    assert "walking +0.200 m/s forward, +0.000 m/s left, +0.0 deg/s; for 5 s" in out
    assert "standing; by its odometry +" in out
    snapshot = state(capsys)
    assert snapshot["state"] == "standing"
    # 0.2 m/s over 5 s, less for getting there, and for how coarsely the threads share time.
    assert 0.3 < snapshot["pose"]["x_m"] < 1.6
    assert abs(snapshot["pose"]["y_m"]) < 1e-6
    assert snapshot["faults"] == []  # the stream was never late for its time-to-live


def test_walking_until_ctrl_c_ends_standing(
    service: FastService, monkeypatch: pytest.MonkeyPatch, capsys: Output
) -> None:
    main(["stand"])
    sends = 0

    def sleep(duration_s: float) -> None:
        nonlocal sends
        service.sleep(duration_s)
        sends += 1
        if sends == 12:
            raise KeyboardInterrupt

    monkeypatch.setattr(walk, "stream", partial(walk.stream, sleep=sleep))
    capsys.readouterr()
    assert main(["walk", "--yaw-rate", "0.5", "--json"]) == 0
    snapshot = json.loads(capsys.readouterr().out)
    assert snapshot["state"] == "standing"
    assert snapshot["pose"]["yaw_rad"] > 0.2
    assert sends >= 12


def test_walking_before_standing_is_refused_with_the_next_step(service: FastService, capsys: Output) -> None:
    assert service.machine.state == "off"
    assert main(["walk", "--vx", "0.1"]) == 75
    told = capsys.readouterr()
    assert told.out == ""
    assert "the robot is off; send `stand` first" in told.err


def test_two_commanders_the_second_is_told_who_holds_it(service: FastService, capsys: Output) -> None:
    main(["stand"])
    with Client(service.path) as other:
        other.walk(0.05, 0.0, 0.0, ttl_s=10.0)
        assert main(["walk", "--vx", "0.1"]) == 75
        assert "commands the robot" in capsys.readouterr().err
        assert main(["stop"]) == 0  # needs no claim


@pytest.mark.parametrize(("words", "category"), [(["stop"], 1), (["stop", "--now"], 0)])
def test_a_stop_latches_until_reset_and_stand(
    service: FastService, words: list[str], category: int, capsys: Output
) -> None:
    main(["stand"])
    assert main([*words, "--reason", "smoke"]) == 0
    assert "stop taken" in capsys.readouterr().out
    service.sleep(3.0)
    snapshot = state(capsys)
    assert snapshot["state"] == "stopped"
    assert snapshot["stop"]["category"] == category
    assert "smoke" in snapshot["stop"]["reason"]
    assert main(["stand"]) == 75
    assert "smoke" in capsys.readouterr().err
    assert main(["reset"]) == 0
    assert capsys.readouterr().out == "off; `hobnail stand` wakes the robot\n"
    service.sleep(3.0)
    assert state(capsys)["state"] == "off"  # the reset alone moves nothing
    assert main(["stand"]) == 0


@pytest.mark.usefixtures("service")
def test_state_in_words_and_as_json(capsys: Output) -> None:
    main(["stand"])
    capsys.readouterr()
    assert main(["state"]) == 0
    out = capsys.readouterr().out
    assert "STANDING" in out
    assert "juniper" in out
    assert "left-front" in out
    assert "\x1b" not in out  # not a terminal
    assert state(capsys)["robot"] == "juniper"


def test_no_wait_comes_back_at_once(service: FastService, capsys: Output) -> None:
    assert main(["stand", "--no-wait"]) == 0
    assert "on its way to standing" in capsys.readouterr().out
    assert service.machine.goal == "standing"


def test_a_stop_ends_the_waiting(service: FastService) -> None:
    with Client(service.path) as client:
        client.stand()
        client.stop(category=0, reason="test")
        with pytest.raises(StoppedError, match="test"):
            waiting.wait_for_state(client, ("standing",), 60.0)


class Told:
    """A client that answers `state` with what it is given, again and again."""

    def __init__(self, **changes: object) -> None:
        self.snapshot = {"state": "lowering", "stop": {"latched": False}, "faults": [], **changes}

    def state(self) -> dict[str, object]:
        return self.snapshot


def test_waiting_ends_in_time_and_at_a_fault_that_lies_down() -> None:
    now_s = 0.0

    def sleep(duration_s: float) -> None:
        nonlocal now_s
        now_s += duration_s

    def wait(told: Told) -> None:
        waiting.wait_for_state(told, ("standing",), 5.0, clock=lambda: now_s, sleep=sleep)  # type: ignore[arg-type]

    with pytest.raises(ServiceTimeoutError, match="still lowering after 5 s, wanted standing"):
        wait(Told())
    assert now_s == pytest.approx(5.0, abs=0.2)
    low = {"name": "supply-low", "severity": "rest", "message": "the supply is low", "next": "charge"}
    with pytest.raises(FaultError, match="supply-low: the supply is low; next: charge"):
        wait(Told(faults=[low]))


def test_the_gait_is_listed_and_changed(service: FastService, capsys: Output) -> None:
    main(["stand"])
    capsys.readouterr()
    assert main(["gait"]) == 0
    assert capsys.readouterr().out.splitlines() == ["* trot", "  crawl", "  pace", "  amble"]
    assert main(["gait", "crawl"]) == 0
    assert capsys.readouterr().out == "gait crawl\n"
    service.sleep(0.1)
    assert main(["gait", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["now"] == "crawl"
    assert main(["gait", "gallop"]) == 64
    assert "trot, crawl, pace, amble" in capsys.readouterr().err


def test_the_posture_is_taken_in_mm_and_degrees(service: FastService, capsys: Output) -> None:
    main(["stand"])
    before = state(capsys)["feet_m"]
    assert main(["posture", "--height-mm", "150", "--lean-mm", "10", "-5"]) == 0
    service.sleep(3.0)
    after = state(capsys)
    assert after["height_m"] == pytest.approx(0.15)
    for (x, y, z), (new_x, new_y, new_z) in zip(before, after["feet_m"], strict=True):
        # The body went forward, right and down, so its feet are further back, left and up.
        assert (new_x - x, new_y - y, new_z - z) == pytest.approx((-0.01, 0.005, 0.02), abs=1e-9)
    assert main(["posture", "--roll-deg", "-3", "--lean-mm", "0", "0"]) == 0
    service.sleep(3.0)
    left, right = state(capsys)["feet_m"][:2]
    # Rolled to the left, by the right-hand rule: the left feet are nearer to the body.
    assert left[2] - right[2] == pytest.approx(math.sin(math.radians(3)) * (before[0][1] - before[1][1]))
    capsys.readouterr()
    assert main(["posture", "--height-mm", "900"]) == 64
    assert "0.12 to 0.195" in capsys.readouterr().err
    assert main(["posture"]) == 64
    assert "nothing to do" in capsys.readouterr().err


SHORT = "steps:\n  - forward_mm: 60\n  - turn_deg: 20\n    note: at the door\n"


@pytest.mark.usefixtures("service")
def test_a_route_is_walked_with_progress(tmp_path: Path, capsys: Output) -> None:
    main(["stand"])
    assert main(["route", written(tmp_path, SHORT)]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert "  1/2  forward 60 mm" in lines
    assert "all 2 steps walked in" in lines[-1]
    pose = state(capsys)["pose"]
    assert pose["x_m"] == pytest.approx(0.06, abs=0.002)
    assert pose["yaw_rad"] == pytest.approx(0.349, abs=0.0035)


@pytest.mark.usefixtures("service")
def test_a_route_as_json(tmp_path: Path, capsys: Output) -> None:
    main(["stand"])
    capsys.readouterr()
    assert main(["route", "--json", written(tmp_path, SHORT)]) == 0
    told = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    assert told[-1]["done"] is True
    assert told[-1]["failure"] == ""
    assert {entry["steps"] for entry in told} == {2}


def test_ctrl_c_cancels_the_route(
    service: FastService, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: Output
) -> None:
    main(["stand"])

    def follow(snapshots: Iterator[dict[str, Any]], *, json: bool) -> int:
        assert json is False
        list(islice(snapshots, 2))
        raise KeyboardInterrupt

    monkeypatch.setattr(route, "follow", follow)
    assert main(["route", written(tmp_path, "steps:\n  - forward_mm: 20000\n")]) == 130
    assert "cancelled; the robot stands" in capsys.readouterr().err
    assert service.machine.route is None
    assert state(capsys)["goal"] == "standing"


def test_another_client_may_cancel_a_route(service: FastService, capsys: Output) -> None:
    assert main(["route", "--cancel"]) == 75
    assert "none is being walked" in capsys.readouterr().err
    main(["stand"])
    with Client(service.path) as walker:
        walker.route([{"forward_mm": 20000}])
        assert main(["route", "--cancel"]) == 0
        assert walker.state()["route"] is None


def test_a_route_that_somebody_else_ends_is_told(service: FastService, capsys: Output) -> None:
    main(["stand"])
    with Client(service.path) as walker:
        walker.route([{"forward_mm": 20000}])
        snapshots = walker.watch(rate_hz=50.0)
        first = next(snapshots)
        with Client(service.path) as other:
            other.stop(category=0)
        assert route.follow([first, *islice(snapshots, 3)][-1:]) == 75
    assert "ended before its last step" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("snapshots", "told"),
    [
        ([], "the service ended before the route did"),
        ([{"route": None}], "ended before its last step"),
        (
            [
                {
                    "route": {
                        "step": 1,
                        "steps": 2,
                        "description": "x",
                        "done": True,
                        "failure": "step 1 of 2 did not",
                    }
                }
            ],
            "step 1 of 2 did not",
        ),
    ],
)
def test_every_early_end_of_a_route_is_75(snapshots: list[dict[str, Any]], told: str, capsys: Output) -> None:
    assert route.follow(snapshots) == 75
    assert told in capsys.readouterr().err


@pytest.mark.usefixtures("service")
def test_a_route_that_the_robot_cannot_walk_is_refused_by_the_service(tmp_path: Path, capsys: Output) -> None:
    main(["stand"])
    assert main(["route", written(tmp_path, "steps:\n  - gait: gallop\n")]) == 64
    assert "steps[0].gait" in capsys.readouterr().err


def test_watch_streams_json_and_lines(service: FastService, capsys: Output) -> None:
    with Client(service.path) as client:
        stream = client.watch(rate_hz=50.0)
        watch.print_lines(islice(stream, 5))
    lines = capsys.readouterr().out.splitlines()
    assert 1 <= len(lines) <= 5
    assert "off" in lines[0]
    assert "\x1b" not in lines[0]


@pytest.mark.usefixtures("service")
def test_watch_ends_quietly_with_ctrl_c(monkeypatch: pytest.MonkeyPatch, capsys: Output) -> None:
    seen = 0

    def interrupted(snapshot: object) -> None:
        nonlocal seen
        seen += 1
        assert isinstance(snapshot, dict)
        if seen == 3:
            raise KeyboardInterrupt

    monkeypatch.setattr(watch, "print_json", interrupted)
    assert main(["watch", "--json", "--rate", "50"]) == 0
    assert capsys.readouterr().err == ""


def test_plain_watching_tells_each_change_and_a_line_a_second(capsys: Output) -> None:
    first, changed = snapshot(), snapshot(state="standing")
    times = iter([0.0, 0.4, 0.5, 1.4, 1.6])
    watch.print_lines([first, first, changed, changed, changed], clock=lambda: next(times))
    lines = capsys.readouterr().out.splitlines()
    assert [("walking" in line, "standing" in line) for line in lines] == [
        (True, False),
        (False, True),
        (False, True),
    ]
