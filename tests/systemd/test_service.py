"""The service under a real systemd: how it starts, walks, stops, dies, hangs, and what follows.

Times measured here are of real processes; each bound is one that the unit file
or the project promises, several times what is seen.
"""

from __future__ import annotations

import json
import re
import time

import pytest

from hobnail import errors
from systemd.board import USER, Board, pulsing
from systemd.container import wait_until

pytestmark = [pytest.mark.systemd, pytest.mark.slow]

DEAD_MEANS_OFF_S = 1.0  # the project's own limit
WATCHDOG_S = 2.0  # WatchdogSec of the unit
JOINTS = 12  # of juniper
CONFIG = "/etc/hobnail/robot.yaml"
EVENTS = "/var/log/hobnail/events.log"
BROKEN = ("period_ms:", "perod_ms:")


def end_main(board: Board, signal: str, unit: str = "hobnail") -> None:
    board.run(f"systemctl kill --kill-whom=main --signal={signal} {unit}")


def fails_to_start(board: Board, unit: str = "hobnail") -> None:
    done = board.run(f"systemctl start {unit}", check=False)
    assert done.returncode != 0
    assert board.show("ActiveState", unit) == "failed"


def lay_down(events: str) -> None:
    """The log tells that it went from walking to rest, then off."""
    told = [events.index(text) for text in ("walking ->", "lowering -> resting", "resting -> off")]
    assert told == sorted(told)


def nothing_moves(board: Board) -> None:
    """It is off and stays so, whatever is asked of it short of `stand`."""
    refused = board.run("hobnail walk --vx 0.1", user=USER, check=False)
    assert refused.returncode == errors.EX_TEMPFAIL, refused.stderr
    assert board.state()["state"] == "off"
    assert board.pulsing() == 0


def test_comes_up_with_the_board_and_moves_nothing(board: Board) -> None:
    assert board.state()["state"] == "off"
    assert board.pulsing() == 0
    assert board.show("NRestarts") == "0"
    assert "is ready" in board.show("StatusText")


def test_start_returns_when_commands_are_taken(board: Board) -> None:
    board.run("systemctl stop hobnail")
    done = board.run("systemctl start hobnail; runuser -u gardener -- hobnail state --json")
    assert '"state":"off"' in done.stdout


def test_is_not_ready_before_its_boards_answer(board: Board) -> None:
    """There is no I2C bus here: the real driver waits for one, and gives up in time."""
    board.run("systemctl stop hobnail; rm /etc/systemd/system/hobnail.service.d/model.conf")
    board.run("systemctl daemon-reload; systemctl start --no-block hobnail")
    wait_until(lambda: board.show("SubState") == "start", 10, "the start has begun")
    states = set()

    def over() -> bool:
        states.add(board.show("SubState"))
        return "start" not in states or board.show("SubState") not in ("start", "start-pre")

    took_s = wait_until(over, 30, "the start is given up")
    assert "running" not in states
    assert took_s > 5, "it must wait for a bus that comes late"
    assert board.show("ExecMainStatus") == str(errors.EX_UNAVAILABLE)
    assert "there is no such bus" in board.journal()


def test_feeds_the_watchdog(board: Board) -> None:
    first = int(board.show("WatchdogTimestampMonotonic"))
    later = first + 3 * WATCHDOG_S * 1e6
    wait_until(lambda: int(board.show("WatchdogTimestampMonotonic")) > later, 30, "it goes on feeding")
    assert (board.show("Result"), board.show("NRestarts")) == ("success", "0")


def test_group_commands_and_others_may_not(board: Board) -> None:
    board.run("useradd -m stranger")
    with board.walking():
        assert board.state()["command"]["vx_m_s"] == pytest.approx(0.1)
    refused = board.run("hobnail stand", user="stranger", check=False)
    assert refused.returncode in (errors.EX_NOPERM, errors.EX_UNAVAILABLE)
    assert "ermission" in refused.stderr
    assert "Traceback" not in refused.stderr


def test_stop_while_walking_lies_down_then_ends_the_pulses(board: Board) -> None:
    with board.walking():
        board.run("systemctl stop hobnail")
        assert board.pulsing() == 0
    assert (board.show("ActiveState"), board.show("Result")) == ("inactive", "success")
    assert board.show("ExecMainStatus") == "0"
    lay_down(board.file(EVENTS).read_text())
    journal = board.journal()
    assert [journal.count(line) for line in ("off -> waking", "lowering -> resting")] == [1, 1]
    assert board.file("/var/lib/hobnail/posture.json").is_file(), "the posture to wake in, whenever that is"


def test_shutdown_while_walking_is_the_same(board: Board) -> None:
    chips = board.chips()
    # Both stay readable when the machine is down.
    with board.file(EVENTS).open() as events:
        with board.walking():
            board.container.power_off()
        lay_down(events.read())
    assert pulsing(chips) == 0


def test_killed_in_mid_walk_every_channel_is_off_within_a_second(board: Board) -> None:
    with board.walking():
        before_s = time.monotonic()
        end_main(board, "KILL")
        wait_until(lambda: board.pulsing() == 0, 10, "pulses end after SIGKILL")
        took_s = time.monotonic() - before_s
        wait_until(lambda: board.show("NRestarts") == "1", 10, "it is started again")
        board.wait_active()
        nothing_moves(board)
    assert took_s < DEAD_MEANS_OFF_S
    assert "all outputs off" in board.journal()


def test_after_a_kill_in_mid_walk_the_log_explains_it(board: Board) -> None:
    with board.walking():
        end_main(board, "KILL")
        wait_until(lambda: board.show("NRestarts") == "1", 10, "it is started again")
        board.wait_active()
    told = json.loads(board.run("hobnail log --json", user=USER).stdout)
    (cut,) = told["incident"]["alarms"]
    assert (cut["kind"], cut["name"]) == ("cut-off", "walking")
    assert told["incident"]["tick"]["state"] == "walking"
    asked = [(entry["who"], entry["text"]) for entry in told["entries"] if entry["kind"] == "command"]
    assert any(f"user {USER}" in who and text.startswith("walk +0.100 m/s") for who, text in asked)
    folders = {source.rpartition("/")[0] for source in told["sources"]}
    assert folders >= {"/run/hobnail", "/var/log/hobnail", "/var/lib/hobnail/recordings"}
    board.run("useradd -m stranger")
    refused = board.run("hobnail log", user="stranger", check=False)
    assert refused.returncode == errors.EX_NOPERM, refused.stderr
    assert "usermod -aG hobnail" in refused.stderr


def test_doctor_finds_a_healthy_service_and_what_is_wrong_with_a_broken_one(board: Board) -> None:
    for user in ("root", USER):
        told = json.loads(board.run("hobnail doctor --json", user=user).stdout)["findings"]
        assert [each for each in told if each["grade"] == "mend"] == []
        words = {each["subject"]: each["text"] for each in told}
        assert "is off, nobody commands it" in words["socket"]
        assert CONFIG in words["configuration"]
        if user == "root":  # systemd answers no other user without a message bus, which is not installed here
            is_on = "real-time scheduling: on" in board.journal()
            assert "is active, enabled" in words["unit"]
            assert words["real time"].startswith(f"the service runs with{'' if is_on else 'out'} real-time")
    board.run("systemctl stop hobnail")
    board.edit(CONFIG, *BROKEN)
    fails_to_start(board)
    done = board.run("hobnail doctor --json", check=False)
    assert done.returncode == errors.EX_CONFIG
    mends = [each for each in json.loads(done.stdout)["findings"] if each["grade"] == "mend"]
    assert {each["subject"] for each in mends} == {"unit", "configuration"}
    assert "the configuration is wrong" in mends[0]["text"]


def test_hung_the_watchdog_ends_it_and_the_pulses(board: Board) -> None:
    with board.walking():
        before_s = time.monotonic()
        end_main(board, "STOP")
        wait_until(lambda: board.pulsing() == 0, 10, "pulses end after a hang")
        took_s = time.monotonic() - before_s
        assert took_s < WATCHDOG_S + DEAD_MEANS_OFF_S
        wait_until(lambda: board.show("NRestarts") == "1", 10, "it is started again")
        board.wait_active()
        nothing_moves(board)
    journal = board.journal()
    assert "Watchdog timeout" in journal
    assert "Fatal Python error: Aborted" in journal, "it must say where it hung"


def test_wrong_configuration_fails_once_and_says_why(board: Board) -> None:
    board.run("systemctl stop hobnail")
    board.edit(CONFIG, *BROKEN)
    fails_to_start(board)
    assert (board.show("ExecMainStatus"), board.show("NRestarts")) == (str(errors.EX_CONFIG), "0")
    journal = board.journal()
    assert f"{CONFIG}:" in journal
    assert "perod_ms" in journal
    assert "period_ms" in journal, "the nearest valid key"
    assert "Traceback" not in journal
    assert "Scheduled restart" not in journal

    board.edit(CONFIG, *reversed(BROKEN))
    board.run("systemctl start hobnail")
    assert board.state()["state"] == "off"


def test_failed_start_ends_pulses_of_its_boards(board: Board) -> None:
    """Pulses that were left on, by whatever means, end although the program cannot even read its file."""
    board.command("stand")
    board.drop_in("ExecStopPost=")  # for this once nobody releases
    end_main(board, "KILL")
    wait_until(lambda: board.show("ActiveState") != "active", 10, "it is dead")
    board.run("systemctl stop hobnail")
    assert board.pulsing() > 0
    board.drop_in("")
    board.edit(CONFIG, *BROKEN)
    fails_to_start(board)
    assert board.pulsing() == 0


def test_restarts_have_a_limit(board: Board) -> None:
    board.run("systemctl stop hobnail")
    board.drop_in("ExecStart=\nExecStart=/bin/false\nRestartSec=100ms")
    board.run("systemctl start hobnail", check=False)
    wait_until(
        lambda: "Start request repeated too quickly" in board.journal(), 20, "it is not tried again any more"
    )
    assert board.show("NRestarts") == "5"
    assert board.show("ActiveState") == "failed"


def test_restart_in_mid_walk_moves_nothing(board: Board) -> None:
    with board.walking():
        board.run("systemctl restart hobnail")
        nothing_moves(board)
    assert board.file("/run/hobnail/last-minute.previous.ring").is_file(), (
        "the last minute outlives a restart"
    )


def test_robots_of_one_board_are_apart(board: Board) -> None:
    second = "hobnail@bramble"
    board.follow("Several robots on one board")
    assert board.state(second)["robot"] == "bramble"
    with board.walking(), board.walking(second):
        end_main(board, "KILL", second)
        wait_until(lambda: board.pulsing(second) == 0, 10, "its pulses end")
        board.wait_active(second)
        assert board.state(second)["state"] == "off"
        # A start that fails before it knows its boards must not touch the others' either.
        board.run(f"systemctl stop {second}; rm -r /run/{second}")
        board.edit(f"/etc/{second}/robot.yaml", *BROKEN)
        fails_to_start(board, second)
        assert "no board is noted" in board.journal(second)
        assert board.state()["state"] == "walking"
        assert board.pulsing() == JOINTS
    assert board.show("NRestarts") == "0"


def test_is_confined(board: Board) -> None:
    status = dict(
        line.split(":", 1)
        for line in board.file(f"/proc/{board.show('MainPID')}/status").read_text().splitlines()
    )
    got = {name: status[name].strip() for name in ("NoNewPrivs", "Seccomp", "CapEff", "CapBnd")}
    assert got == {"NoNewPrivs": "1", "Seccomp": "2", "CapEff": "0" * 16, "CapBnd": "0" * 16}
    groups = {board.run(f"getent group {gid}").stdout.split(":")[0] for gid in status["Groups"].split()}
    assert groups == {"hobnail", "i2c", "gpio"}
    user = board.run(
        "stat -c %U:%G:%a /run/hobnail /run/hobnail/hobnail.sock /var/log/hobnail"
    ).stdout.split()
    assert user == ["hobnail:hobnail:750", "hobnail:hobnail:660", "hobnail:hobnail:750"]


def test_realtime_is_allowed_by_the_filter(board: Board) -> None:
    """Limits cannot be raised in every container; rights take their place here, under the same filter."""
    board.run("systemctl stop hobnail")
    assert "real-time scheduling: " in board.journal()
    board.drop_in(
        "CapabilityBoundingSet=CAP_SYS_NICE CAP_IPC_LOCK\nAmbientCapabilities=CAP_SYS_NICE CAP_IPC_LOCK"
    )
    board.run("systemctl start hobnail")
    (scheduling, memory) = re.findall("real-time scheduling: .*|memory: .*", board.journal())[-2:]
    assert scheduling.startswith("real-time scheduling: on")
    assert "not" not in memory


def test_systemd_itself_finds_no_fault(board: Board) -> None:
    done = board.run("systemd-analyze --no-pager verify /etc/systemd/system/hobnail.service 2>&1")
    assert done.stdout == ""
    board.run("systemd-analyze --no-pager security --threshold=15 hobnail.service")
