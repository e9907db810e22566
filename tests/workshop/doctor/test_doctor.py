"""`hobnail doctor` on machines that are made up: every probe, each grade, hangs and failures apart."""

from __future__ import annotations

import errno
import os
import resource
import shutil
import subprocess
import threading
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from hobnail.config import load_robot
from hobnail.errors import DriverUnavailableError, ServiceTimeoutError, ServiceUnavailableError
from hobnail.robot import Robot, StopInput
from hobnail.service.socket_file import kept_free
from hobnail.workshop.doctor import machine, robot, service
from hobnail.workshop.doctor.case import Case
from hobnail.workshop.doctor.examination import findings
from hobnail.workshop.doctor.findings import Finding, Grade, Probe, examine, fine
from hobnail.workshop.doctor.world import User, World
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import Driver
from hobnail_drivers.errors import BusError, MissingLibraryError
from hobnail_drivers.simulated import SimulatedDriver
from robots import CONFIG, juniper
from snapshots import fault, snapshot

EXEC = (
    "{ path=/opt/hobnail/bin/hobnail ; argv[]=/opt/hobnail/bin/hobnail run /etc/hobnail/robot.yaml "
    "--driver pca9685 --realtime ; ignore_errors=no ; start_time=[n/a] }"
)
UNIT = {
    "LoadState": "loaded",
    "UnitFileState": "enabled",
    "ActiveState": "active",
    "SubState": "running",
    "Result": "success",
    "NRestarts": "0",
    "NeedDaemonReload": "no",
    "ExecStart": EXEC,
    "ExecMainStatus": "0",
    "MainPID": "77",
    "User": "hobnail",
    "SupplementaryGroups": "i2c gpio",
    "LimitRTPRIO": "50",
    "LimitMEMLOCK": "infinity",
}
REQUIRED = ["numpy>=2.0", "pyyaml>=6.0", 'smbus2>=0.4; extra == "hardware"', 'scipy; extra == "tests"']
VERSIONS = {"hobnail": "0.1.0", "numpy": "2.1.3", "pyyaml": "6.0", "smbus2": "0.5"}


class RealBoards(ModelledPca9685Driver):
    """The chip model, taken for real boards."""

    is_model = False


def nobody(_path: Path) -> tuple[dict[str, Any], dict[str, Any]]:
    raise AssertionError("nobody is to be asked")


@pytest.fixture
def world(tmp_path: Path) -> World:
    """A machine in good order whose service does not run: a unit, a bus, a configuration."""
    for folder in ("run/hobnail", "var/lib/hobnail", "var/log/hobnail", "etc/hobnail", "dev"):
        (tmp_path / folder).mkdir(parents=True)
    shutil.copy(CONFIG / "juniper.yaml", tmp_path / "etc/hobnail/robot.yaml")
    (tmp_path / "dev/i2c-1").touch(mode=0o660)
    owner = (tmp_path / "dev").stat()
    return World(
        root=tmp_path,
        environ={},
        show_unit=lambda _name: {**UNIT, "ActiveState": "inactive", "MainPID": "0"},
        ask=nobody,
        find_driver=lambda name: (RealBoards if name == "pca9685" else SimulatedDriver, ""),
        line_user=lambda _chip, _line: None,
        find_user=lambda name: User(name or "gardener", owner.st_uid, frozenset({owner.st_gid})),
        group_number=lambda _name: owner.st_gid,
        installed=VERSIONS.get,
        required=lambda: REQUIRED,
        limit=lambda _kind: 0,
        policy=lambda _pid: 1,
        free_bytes=lambda _path: 10**9,
        wall_s=lambda: 1.8e9,
    )


def told(found: Iterator[Finding] | list[Finding], subject: str = "") -> list[tuple[str, str]]:
    """(grade, text and next) of each finding, of one subject."""
    return [
        (str(each.grade), f"{each.text} | {each.next}") for each in found if subject in ("", each.subject)
    ]


def one(found: Iterator[Finding]) -> tuple[str, str]:
    (finding,) = told(found)
    return finding


def loaded(world: World, **changes: object) -> Case:
    """A case in which unit, configuration and driver are known already."""
    case = Case(world, **changes)  # type: ignore[arg-type]
    list(service.unit(case))
    list(robot.configuration(case))
    list(robot.driver(case))
    return case


def test_a_machine_in_good_order_has_nothing_to_mend(world: World) -> None:
    found = list(findings(Case(world)))
    assert [each for each in found if each.grade is Grade.MEND] == []
    subjects = {each.subject for each in found}
    assert subjects >= {"python", "unit", "socket", "configuration", "driver", "packages", "bus", "boards"}
    assert told(found, "boards") == [
        ("fine", "board main, bus 1 address 0x40: answers, asleep, no pulses; plain I2C | ")
    ]
    assert told(found, "calibration")[0][0] == "note"
    assert told(found, "unit") == [
        ("note", "hobnail.service does not run (inactive) | `systemctl start hobnail`")
    ]


def test_everything_that_is_to_be_mended_says_what_to_do(world: World) -> None:
    def broken(*_: object) -> Any:
        raise OSError(errno.EIO, "Input/output error")

    worst = replace(
        world,
        python=(3, 9, 2),
        show_unit=lambda _name: {
            **UNIT,
            "ActiveState": "failed",
            "Result": "exit-code",
            "ExecMainStatus": "78",
        },
        installed=lambda _name: None,
        find_user=lambda name: User(name or "x", 99, frozenset()),
        group_number=lambda _name: None,
        free_bytes=lambda _path: 1000,
        line_user=broken,
    )
    found = list(findings(Case(worst)))
    mends = [each for each in found if each.grade is Grade.MEND]
    assert {each.subject for each in mends} >= {"python", "unit", "packages", "bus", "directories"}
    assert all(each.next for each in mends)


def test_on_a_plain_laptop_nothing_is_wrong(world: World) -> None:
    plain = replace(world, show_unit=lambda _name: None, environ={"HOBNAIL_SOCKET": "/nowhere/x.sock"})
    found = list(findings(Case(plain, config=CONFIG / "juniper.yaml")))
    assert [each for each in found if each.grade is Grade.MEND] == []
    assert ("fine", "simulated: a model, no hardware is needed and none is looked for | ") in told(
        found, "driver"
    )
    assert told(found, "bus") == told(found, "boards") == told(found, "calibration") == []
    assert "not run by systemd" in told(found, "unit")[0][1]


# --- how probes are run -------------------------------------------------------------------------


def test_a_probe_that_fails_does_not_stop_the_others() -> None:
    def fails() -> Iterator[Finding]:
        yield fine("first", "before it fails")
        raise ZeroDivisionError("division by zero")

    found = list(examine([Probe("first", fails), Probe("second", lambda: [fine("second", "after")])]))
    assert [(each.subject, each.grade) for each in found] == [
        ("first", Grade.FINE),
        ("first", Grade.MEND),
        ("second", Grade.FINE),
    ]
    assert "ZeroDivisionError: division by zero" in found[1].text


def test_a_probe_that_hangs_is_given_up_and_said() -> None:
    let_go = threading.Event()

    def hangs() -> Iterator[Finding]:
        yield fine("bus", "before it hangs")
        let_go.wait(60.0)
        yield fine("bus", "too late")

    found = list(
        examine(
            [Probe("bus", hangs, "switch it off"), Probe("next", lambda: [fine("next", "")])], limit_s=0.05
        )
    )
    let_go.set()
    assert [each.text for each in found] == ["before it hangs", "no result within 0.05 s", ""]
    assert found[1].next == "switch it off"


# --- the computer -------------------------------------------------------------------------------


def test_packages_that_are_missing_or_old(world: World) -> None:
    case = Case(world, is_hardware=True)
    assert one(machine.packages(case)) == ("fine", "hobnail 0.1.0, numpy 2.1.3, pyyaml 6.0, smbus2 0.5 | ")
    case.world = replace(world, installed={**VERSIONS, "numpy": "1.26.4", "smbus2": None}.get)
    grade, text = one(machine.packages(case))
    assert grade == "mend"
    assert "numpy is 1.26.4, needed 2.0 or newer; smbus2 is missing" in text
    assert "hobnail[hardware]" in text
    case.is_hardware = False
    assert "smbus2" not in one(machine.packages(case))[1]
    case.world = replace(world, required=list)
    assert one(machine.packages(case))[0] == "note"


@pytest.mark.parametrize(
    ("unit", "policy", "limit", "grade"),
    [
        ({}, 0, 0, "note"),
        ({}, 0, 40, "fine"),
        ({}, 0, resource.RLIM_INFINITY, "fine"),
        ({**UNIT, "ActiveState": "inactive"}, 0, 0, "fine"),
        ({**UNIT, "ActiveState": "inactive", "LimitRTPRIO": "0"}, 0, 99, "note"),
        (UNIT, 1, 0, "fine"),
        (UNIT, 1 | 0x40000000, 0, "fine"),  # SCHED_FIFO with SCHED_RESET_ON_FORK
        (UNIT, 0, 99, "note"),
    ],
)
def test_real_time_scheduling(
    world: World, unit: dict[str, str], policy: int, limit: int, grade: str
) -> None:
    gardener = User("gardener", 1000, frozenset())
    changed = replace(world, policy=lambda _: policy, limit=lambda _: limit, find_user=lambda _: gardener)
    assert one(machine.scheduling(Case(changed, unit=unit)))[0] == grade


@pytest.mark.parametrize(("uid", "advice"), [(0, "hobnail log --all"), (1000, "as root")])
def test_real_time_of_a_service_that_no_unit_runs(world: World, uid: int, advice: str) -> None:
    """Who is root already is not sent to become it."""
    changed = replace(world, find_user=lambda _: User("anyone", uid, frozenset()))
    grade, told = one(machine.scheduling(Case(changed, state={})))
    assert (grade, advice in told) == ("note", True)


def test_locked_memory(world: World) -> None:
    gardener = User("gardener", 1000, frozenset())
    case = Case(replace(world, limit=lambda _: 8_388_608, find_user=lambda _: gardener))
    assert one(machine.memory(case))[0] == "note"
    assert "8192 kB" in one(machine.memory(case))[1]
    case.unit = UNIT
    assert one(machine.memory(case)) == ("fine", "the service may lock all its memory | ")


def test_governor_and_clock(world: World) -> None:
    assert list(machine.processor(Case(world))) == []
    path = world.path("/sys/devices/system/cpu/cpu0/cpufreq/scaling_governor")
    path.parent.mkdir(parents=True)
    for text, grade in (("powersave\n", "note"), ("schedutil\n", "fine")):
        path.write_text(text)
        assert one(machine.processor(Case(world)))[0] == grade
    assert list(machine.clock(Case(world))) == []
    assert one(machine.clock(Case(replace(world, wall_s=lambda: 3600.0))))[0] == "note"


# --- the robot ----------------------------------------------------------------------------------


def test_a_configuration_is_found_where_it_is_in_use(world: World) -> None:
    case = Case(world)
    assert case.config_path() == world.path("/etc/hobnail/robot.yaml")
    case.unit = {**UNIT, "ExecStart": EXEC.replace("/etc/hobnail/robot.yaml", "/etc/mine.yaml")}
    assert case.config_path() == world.path("/etc/hobnail/robot.yaml")
    world.path("/etc/hobnail/robot.yaml").unlink()
    assert case.config_path() == world.path("/etc/mine.yaml")
    assert one(robot.configuration(case))[0] == "mend"
    case.unit = {}
    assert case.config_path() is None
    assert one(robot.configuration(case))[0] == "note"
    case.described = {"source": str(CONFIG / "bramble.yaml")}
    assert "bramble, 18 servos" in one(robot.configuration(case))[1]


def test_the_driver_is_that_of_the_unit(world: World) -> None:
    case = Case(world, unit=UNIT)
    assert case.driver_name() == "pca9685"
    case.unit = {**UNIT, "ExecStart": EXEC.replace("--driver pca9685", "--driver=mine:x")}
    assert case.driver_name() == "mine:x"
    case.state = snapshot()
    assert case.driver_name() == "simulated"
    case.driver = "other"
    assert case.driver_name() == "other"
    assert Case(world).driver_name() == "simulated"


def test_an_unknown_driver_is_to_be_mended(world: World) -> None:
    def none(_name: str) -> tuple[type[Driver], str]:
        raise DriverUnavailableError("there is no driver 'pca'; there are: simulated")

    assert one(robot.driver(Case(replace(world, find_driver=none))))[0] == "mend"


def test_a_wrong_configuration_tells_its_first_problems(world: World) -> None:
    path = world.path("/etc/hobnail/robot.yaml")
    text = path.read_text()
    for old in ("period_ms:", "upper_mm:", "nominal_v:", "forward_m_s:", "wake_group:", "mass_kg:"):
        text = text.replace(old, f"x{old}")
    path.write_text(text)
    found = list(robot.configuration(Case(world)))
    assert len(found) == 4
    assert {each.grade for each in found} == {Grade.MEND}
    assert "robot.yaml:" in found[0].text
    assert "more to mend" in found[-1].text


def test_a_calibration_is_dated(world: World) -> None:
    case = loaded(world)
    assert one(robot.calibration(case))[0] == "note"
    world.path("/etc/hobnail/robot.calibration.yaml").write_text("x")
    assert "last changed 20" in one(robot.calibration(case))[1]


@pytest.mark.parametrize(
    ("mode", "user", "supplementary", "grade"),
    [
        (0o660, User("hobnail", 5, frozenset({7})), "", "fine"),
        (0o660, User("hobnail", 5, frozenset()), "i2c", "fine"),
        (0o660, User("hobnail", 5, frozenset()), "", "mend"),
        (0o600, User("hobnail", 5, frozenset({7})), "i2c", "mend"),
        (0o666, User("hobnail", 5, frozenset()), "", "fine"),
        (0o600, User("root", 0, frozenset()), "", "fine"),
    ],
)
def test_who_may_use_the_bus(world: World, mode: int, user: User, supplementary: str, grade: str) -> None:
    path = world.path("/dev/i2c-1")
    path.chmod(mode)
    group = path.stat().st_gid
    groups = frozenset({group} if user.groups else set())
    changed = replace(world, find_user=lambda _: replace(user, groups=groups), group_number=lambda _: group)
    case = loaded(changed)
    case.unit["SupplementaryGroups"] = supplementary
    assert one(robot.devices(case))[0] == grade


def test_a_bus_that_is_not_there(world: World) -> None:
    world.path("/dev/i2c-1").unlink()
    grade, text = one(robot.devices(loaded(world)))
    assert grade == "mend"
    assert "modprobe i2c-dev" in text


def test_boards_that_a_service_holds_are_not_touched(world: World) -> None:
    case = loaded(world)

    def never(_name: str) -> tuple[type[Driver], str]:
        raise AssertionError("the boards are held")

    case.world = replace(world, find_driver=never)
    case.state = snapshot(
        driver={"name": "pca9685", "simulated": False, "frame_hz": {"main": 99.8}, "frames": 5}
    )
    assert one(robot.boards(case)) == (
        "fine", "not looked at: the service holds them; it says main 99.8 Hz, 5 frames sent | "
    )  # fmt: skip
    case.state, case.is_mute = None, True
    assert one(robot.boards(case))[0] == "note"


def test_a_missing_library_is_to_be_mended(world: World) -> None:
    class Missing(RealBoards):
        def survey(self) -> Any:
            raise MissingLibraryError("smbus2 is needed")

    case = loaded(replace(world, find_driver=lambda _: (Missing, "")))
    grade, text = one(robot.boards(case))
    assert grade == "mend"
    assert "hobnail[hardware]" in text


@pytest.mark.parametrize(
    ("holder", "runs", "grade"),
    [
        (None, False, "fine"),
        (None, True, "note"),
        ("hobnail-stop", True, "fine"),
        ("hobnail-stop", False, "mend"),
        ("gpio-keys", True, "mend"),
    ],
)
def test_lines(world: World, holder: str | None, runs: bool, grade: str) -> None:
    case = loaded(replace(world, line_user=lambda _chip, _line: holder))
    assert list(robot.lines(case)) == []
    case.robot = with_stop_input()
    case.state = snapshot() if runs else None
    assert one(robot.lines(case))[0] == grade


def test_a_line_that_cannot_be_looked_at(world: World) -> None:
    def none(chip: str, line: int) -> str | None:
        raise BusError(errno.ENOENT, "there is no such GPIO chip", f"{chip} line {line}", "GPIO")

    case = loaded(replace(world, line_user=none))
    case.robot = with_stop_input()
    assert one(robot.lines(case)) == (
        "mend", "stop input, gpiochip0 line 4 cannot be looked at | there is no such GPIO chip"
    )  # fmt: skip


def with_stop_input() -> Robot:
    safety = replace(juniper().safety, stop_input=StopInput(chip="gpiochip0", line=4))
    return replace(juniper(), safety=safety)


# --- the service --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "grade", "words"),
    [
        ({}, "fine", "is active, enabled"),
        ({"LoadState": "not-found"}, "note", "not installed"),
        ({"LoadState": "masked"}, "note", "not installed (masked)"),
        ({"UnitFileState": "disabled"}, "note", "does not start with the machine"),
        ({"NeedDaemonReload": "yes"}, "note", "daemon-reload"),
        ({"NRestarts": "3"}, "note", "started again 3 times"),
        ({"ActiveState": "activating"}, "note", "activating"),
        ({"ActiveState": "inactive"}, "note", "systemctl start"),
        ({"ActiveState": "failed", "ExecMainStatus": "78"}, "mend", "the configuration is wrong"),
        ({"ActiveState": "failed", "ExecMainStatus": "69"}, "mend", "no board or driver"),
        ({"ActiveState": "failed", "Result": "watchdog"}, "mend", "the program hung"),
    ],
)
def test_the_unit(world: World, changes: dict[str, str], grade: str, words: str) -> None:
    case = Case(replace(world, show_unit=lambda _: {**UNIT, **changes}))
    assert any(got == grade and words in text for got, text in told(service.unit(case)))


def test_a_service_manager_that_does_not_answer(world: World) -> None:
    def slow(_name: str) -> dict[str, str]:
        raise subprocess.TimeoutExpired("systemctl", 4.0)

    assert one(service.unit(Case(replace(world, show_unit=slow))))[0] == "note"


def answering(world: World, answer: Callable[[], dict[str, Any]]) -> Case:
    """A machine with something on the socket."""
    import socket

    path = world.path("/run/hobnail/hobnail.sock")
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as listener:
        listener.bind(str(path))
    case = Case(replace(world, ask=lambda _: (answer(), {"source": "x"})), socket=path)
    case.unit = dict(UNIT)
    return case


def test_a_service_that_is_well(world: World) -> None:
    case = answering(world, lambda: snapshot(faults=[]))
    found = told(service.answer(case))
    assert [grade for grade, _ in found] == ["fine", "note", "fine"]
    assert "juniper is walking, client 1 commands it" in found[0][1]
    assert "nothing moves in the room" in found[1][1]
    assert case.state is not None


def test_faults_and_a_latched_stop_are_told_with_their_next_action(world: World) -> None:
    stop = {"latched": True, "category": 0, "reason": "smoke"}
    state = snapshot(faults=[fault(), fault("bus-retried", "warn")], stop=stop)
    found = list(service.answer(answering(world, lambda: state)))
    assert [(each.subject, each.grade) for each in found[-3:]] == [
        ("stop", Grade.MEND),
        ("fault", Grade.MEND),
        ("fault", Grade.NOTE),
    ]
    assert "smoke" in found[-3].text
    assert found[-2].next.startswith("charge or change the battery")


@pytest.mark.parametrize(
    ("cause", "error", "active", "grade", "words"),
    [
        (ConnectionRefusedError(), ServiceUnavailableError("none"), False, "note", "is stale"),
        (ConnectionRefusedError(), ServiceUnavailableError("none answers"), True, "mend", "none answers"),
        (PermissionError(), ServiceUnavailableError("no"), True, "mend", "usermod -aG hobnail"),
        (None, ServiceTimeoutError("late"), True, "mend", "it hangs or is overloaded"),
    ],
)
def test_a_service_that_does_not_answer(
    world: World, cause: Exception | None, error: Exception, active: bool, grade: str, words: str
) -> None:
    def fails() -> dict[str, Any]:
        raise error from cause

    case = answering(world, fails)
    case.unit["ActiveState"] = "active" if active else "inactive"
    got, text = one(service.answer(case))
    assert got == grade
    assert words in text
    assert case.is_mute == (grade == "mend")


def test_no_socket(world: World) -> None:
    case = Case(world, unit={**UNIT, "ActiveState": "inactive"})
    assert one(service.answer(case))[0] == "fine"
    assert not case.is_mute
    case.unit = dict(UNIT)
    assert one(service.answer(case))[0] == "mend"
    assert case.is_mute
    world.path("/run/hobnail/hobnail.sock").write_text("no socket")
    assert "remove it" in one(service.answer(case))[1]


def test_while_another_program_calibrates_the_boards_are_left_alone(world: World) -> None:
    """By the real lock and the kernel's real list of locks."""
    case = loaded(replace(world, find_driver=lambda _: (RealBoards, "")))
    world.path("/proc").mkdir()
    locks = world.path("/proc/locks")
    another = "1: FLOCK  ADVISORY  WRITE 4711 00:01:1 0 EOF\n"
    with kept_free(world.path("/run/hobnail/hobnail.sock")):
        locks.write_text(another + Path("/proc/locks").read_text())
        assert [grade for grade, _ in told(service.answer(case), "socket")] == ["note", "fine"]
        assert case.busy_process == os.getpid()
        assert one(robot.boards(case)) == (
            "note", f"not looked at: process {os.getpid()} may hold them | see socket, above"
        )  # fmt: skip
    locks.write_text(another + Path("/proc/locks").read_text())
    assert [grade for grade, _ in told(service.answer(case), "socket")] == ["fine"]
    assert one(robot.boards(case))[0] == "fine"


def test_directories(world: World) -> None:
    case = Case(world, unit=UNIT)
    assert [grade for grade, _ in told(service.directories(case))] == ["fine"] * 3
    world.path("/var/log/hobnail").rmdir()
    assert "the first start makes it" in told(service.directories(case))[2][1]
    case.world = replace(world, find_user=lambda _: User("hobnail", 4711, frozenset()))
    assert [grade for grade, _ in told(service.directories(case))] == ["mend", "mend", "fine"]
    for free, grade in ((10**8, "note"), (10**6, "mend")):
        case.world = replace(world, free_bytes=lambda _, free=free: free)  # type: ignore[misc]
        assert told(service.directories(case))[0][0] == grade

    def nobody(_name: str | None) -> User:
        raise KeyError("hobnail")

    case.world = replace(world, find_user=nobody)
    assert "systemd-sysusers" in one(service.directories(case))[1]


def test_a_service_whose_unit_is_not_known_is_not_judged_by_who_asks(world: World) -> None:
    """As where the service manager answers root alone."""
    stranger = User("gardener", 4711, frozenset())
    case = Case(replace(world, find_user=lambda _: stranger, limit=lambda _: 0), state=snapshot())
    case.socket = world.path("/run/hobnail/hobnail.sock")
    assert one(service.directories(case))[0] == "fine"
    assert one(machine.scheduling(case))[0] == "note"
    assert list(machine.memory(case)) == []
    case.state = None
    grade, text = one(service.directories(case))
    assert grade == "mend"
    assert "chown" not in text


def test_what_killed_programs_left(world: World) -> None:
    case = Case(world, unit=UNIT)
    assert list(service.leftovers(case)) == []
    folder = world.path("/run/hobnail")
    for name in (".4711", "boards", "boards.4711", "hobnail.sock", "posture.part"):
        (folder / name).touch()
    grade, text = one(service.leftovers(case))
    assert grade == "note"
    assert ": .4711, boards.4711, posture.part, of" in text
    case.state = snapshot()
    assert list(service.leftovers(case)) == []


def test_a_run_that_did_not_end_at_rest_is_told(world: World) -> None:
    from workshop.log.records import Life

    life = Life(world.path("/run/hobnail"))
    life.stand()
    case = Case(world, unit=UNIT)
    assert "did not end at rest: its last tick with pulses was standing" in one(service.leftovers(case))[1]
    life.end()
    assert list(service.leftovers(case)) == []


def test_the_world_of_the_tests_is_the_real_one_in_its_defaults() -> None:
    """Every probe runs on this very machine, whatever it is, and none raises."""
    found = list(findings(Case(World(), unit_name="hobnail-not-there", config=CONFIG / "juniper.yaml")))
    assert not [each for each in found if "could not be looked at" in each.text]
    assert load_robot(CONFIG / "juniper.yaml").name in told(found, "configuration")[0][1]
