"""The whole service: wired together in this process, and as a process of its own under real signals.

These run in real time, and wait for what the service says, never for a time.
"""

from __future__ import annotations

import errno
import json
import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any, Self

import pytest

from command_line import subprocess_environment
from hobnail.errors import DriverUnavailableError, ServiceError
from hobnail.robot import Robot, StopInput
from hobnail.service import serve
from hobnail.service.archive import RECORDINGS, load_posture
from hobnail.service.bus import Bus
from hobnail.service.client import Client
from hobnail.service.drivers import make_driver
from hobnail.service.recorder import RING_NAME, last_state, read_ring
from hobnail.service.states import State
from hobnail.service.writer import LOG_NAME
from hobnail_drivers.chip_file import open_chip_file
from hobnail_drivers.contact import SimulatedContact
from hobnail_drivers.contract import Driver
from hobnail_drivers.errors import SetupError
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.simulated import SimulatedDriver
from hobnail_drivers.supply import SimulatedSupply
from robots import CONFIG, juniper

WAIT_S = 60.0  # a bound for a broken test, not a time that anything takes


def quick(robot: Robot) -> Robot:
    """Wakes at once and rises fast, so that the test is short."""
    safety = replace(robot.safety, wake_group=12, wake_interval_s=0.02, crouch_s=0.8)
    limits = replace(robot.posture_limits, rate_m_s=0.3)
    return replace(robot, safety=safety, posture_limits=limits)


@pytest.fixture
def plan(monkeypatch: pytest.MonkeyPatch) -> FaultInjector:
    """A simulated driver behind a fault injector, instead of what the name says."""
    injector = FaultInjector()

    def opened(name: str, robot: Robot) -> Driver:
        assert name == "simulated"
        return injector.driver(make_driver(SimulatedDriver, robot))

    monkeypatch.setattr(serve, "open_driver", opened)
    monkeypatch.setattr(serve, "BUS_PAUSE_S", 0.01)
    return injector


def until(client: Client, state: State) -> dict[str, object]:
    """Poll until the robot is in that state."""
    bound_s = time.monotonic() + WAIT_S
    while (told := client.state())["state"] != state:
        assert time.monotonic() < bound_s, f"still {told['state']}"
    return told


class InThread:
    """`serve.run` in a thread, so without signals; leaving it ends the run in good order."""

    def __init__(self, directory: Path, patch: pytest.MonkeyPatch, **settings: object) -> None:
        self.socket = directory / "run" / "hobnail.sock"
        self.result: list[int] = []
        self._settings = settings
        self._thread = threading.Thread(target=self._run)
        self._is_over = threading.Event()
        before_tick = serve.Attendant.before_tick

        def end_when_over(attendant: serve.Attendant, now_s: float) -> None:
            if self._is_over.is_set():
                attendant.machine.power_down("the test is over")
            before_tick(attendant, now_s)

        patch.setattr(serve.Attendant, "before_tick", end_when_over)

    def _run(self) -> None:
        robot = quick(juniper())
        self.result.append(serve.run(robot, socket_path=self.socket, **self._settings))  # type: ignore[arg-type]

    def __enter__(self) -> Self:
        self._thread.start()
        bound_s = time.monotonic() + WAIT_S
        while not self.socket.exists():
            assert self._thread.is_alive()
            assert time.monotonic() < bound_s
        return self

    def __exit__(self, *_: object) -> None:
        self._is_over.set()
        self._thread.join(WAIT_S)
        assert not self._thread.is_alive()


def test_a_life_over_the_socket(tmp_path: Path, plan: FaultInjector, monkeypatch: pytest.MonkeyPatch) -> None:
    shown: list[dict[str, object]] = []
    state_dir, log_dir = tmp_path / "state", tmp_path / "log"
    settings = {"state_dir": state_dir, "log_dir": log_dir, "on_state": shown.append}
    with (
        InThread(tmp_path, monkeypatch, **settings) as service,
        Client(service.socket, timeout_s=WAIT_S) as client,
    ):
        client.stand()
        until(client, State.STANDING)
        client.walk(0.1, 0.0, 0.0, ttl_s=5.0)
        told = until(client, State.WALKING)
        driver = told["driver"]
        assert isinstance(driver, dict)
        assert driver.pop("frames") > 0
        frame_hz = {board.name: board.frame_hz for board in juniper().boards}
        assert driver == {"name": "simulated", "simulated": True, "frame_hz": frame_hz}
        client.stop(0, "a test")
        until(client, State.STOPPED)
        client.reset()
        until(client, State.OFF)
        client.stand()
        until(client, State.STANDING)
    assert service.result == [0]
    assert not service.socket.exists()
    assert (service.socket.parent / "boards").read_text() == ""
    assert last_state(service.socket.parent / RING_NAME) is State.RESTING
    assert load_posture(state_dir, juniper()) is not None
    (recording,) = (state_dir / RECORDINGS).iterdir()
    # The writer may have come to it a little later; what led to the stop is in it all the same.
    assert State.WALKING in {row.state for row in read_ring(recording).rows}
    log = [json.loads(line) for line in (log_dir / LOG_NAME).read_text().splitlines()]
    stopped = next(entry["text"] for entry in log if "stopped" in entry["text"])
    assert stopped == "walking -> stopped: a test (client 1)"
    assert log[-1]["text"] == "the test is over"
    asked = [(entry["text"], entry["pid"]) for entry in log if entry["kind"] == "command"]
    assert [text.split()[0] for text, _ in asked] == ["stand", "walk", "stop,", "reset", "stand"]
    assert {pid for _, pid in asked} == {os.getpid()}
    assert {entry["run"] for entry in log} == {read_ring(recording).header["run"]}
    assert shown[-1]["state"] == "off"
    assert plan.injected == 0


def test_boards_that_are_still_powering_up_are_waited_for(tmp_path: Path, plan: FaultInjector) -> None:
    plan.fail_next(errno.EREMOTEIO, count=3)
    with serve.Running(quick(juniper()), "simulated", tmp_path / "s", None, None, None) as running:
        assert running.bus.is_set_up


def test_boards_that_never_answer_are_given_up(
    tmp_path: Path, plan: FaultInjector, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(serve, "BUS_WAIT_S", 0.05)
    plan.fail_next(errno.EREMOTEIO, count=None)
    with pytest.raises(DriverUnavailableError, match="power") as caught:
        serve.run(quick(juniper()), socket_path=tmp_path / "s")
    assert caught.value.exit_code == 69


def test_a_bus_that_hangs_at_the_start_is_given_up(
    tmp_path: Path, plan: FaultInjector, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(serve, "BUS_WAIT_S", 0.05)
    monkeypatch.setattr(serve, "CLOSE_S", 0.05)
    let_go = threading.Event()

    def hang() -> None:
        let_go.wait(WAIT_S)

    plan.call_next(hang)
    with pytest.raises(DriverUnavailableError, match="no answer"):
        serve.run(quick(juniper()), socket_path=tmp_path / "s")
    let_go.set()


def test_an_error_that_waiting_does_not_mend_is_told_at_once(tmp_path: Path, plan: FaultInjector) -> None:
    def wrong_chip() -> None:
        raise SetupError("MODE1 does not hold what was written")

    plan.call_next(wrong_chip, count=None)
    with pytest.raises(DriverUnavailableError, match="MODE1"):
        serve.run(quick(juniper()), socket_path=tmp_path / "s")


@pytest.mark.usefixtures("plan")
@pytest.mark.parametrize("part", ["Machine", "Recorder", "SocketServer", "Notifier", "Loop"])
def test_every_way_out_releases_and_closes(
    part: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_: object, **__: object) -> None:
        raise ServiceError(f"{part} is broken")

    drivers: list[Driver] = []

    def spy(driver: Driver, **settings: Any) -> Bus:
        drivers.append(driver)
        return Bus(driver, **settings)

    monkeypatch.setattr(serve, "Bus", spy)
    monkeypatch.setattr(serve, part, broken)
    with pytest.raises(ServiceError, match=part):
        serve.run(quick(juniper()), socket_path=tmp_path / "s")
    assert not drivers[0]._is_open
    assert [thread.name for thread in threading.enumerate() if thread.name.startswith("hobnail")] == []
    assert not (tmp_path / "s").exists()


@pytest.mark.usefixtures("plan")
def test_inputs_of_a_model_are_not_looked_for_and_that_is_said(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    robot = quick(juniper())
    robot = replace(robot, safety=replace(robot.safety, stop_input=StopInput(chip="gpiochip9", line=1)))
    with serve.Running(robot, "simulated", tmp_path / "s", None, None, None):
        pass
    assert "not watched" in capsys.readouterr().err


class Watched(InThread):
    """The same with a stop input and a supply monitor, on a driver that is no model."""

    def __init__(self, directory: Path, patch: pytest.MonkeyPatch, **settings: object) -> None:
        super().__init__(directory, patch, **settings)
        robot = quick(juniper())
        stop_input = StopInput(chip="gpiochip0", line=4, debounce_s=0.01)
        self.robot = replace(robot, safety=replace(robot.safety, stop_input=stop_input))
        self.contact = SimulatedContact()
        self.supply = SimulatedSupply(robot.supply.nominal_v)
        patch.setattr(SimulatedDriver, "is_model", False)
        patch.setattr(serve, "open_contact", lambda _: self.contact)
        patch.setattr(serve, "open_monitor", lambda _: self.supply)

    def _run(self) -> None:
        self.result.append(serve.run(self.robot, socket_path=self.socket, **self._settings))  # type: ignore[arg-type]


@pytest.mark.usefixtures("plan")
def test_an_open_stop_input_stops(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with Watched(tmp_path, monkeypatch) as service, Client(service.socket, timeout_s=WAIT_S) as client:
        client.stand()
        until(client, State.STANDING)
        service.contact.closed = False
        told = until(client, State.STOPPED)
        assert "stop-input" in str(told["first_cause"])


@pytest.mark.usefixtures("plan")
def test_a_low_supply_ends_at_rest(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with Watched(tmp_path, monkeypatch) as service, Client(service.socket, timeout_s=WAIT_S) as client:
        client.stand()
        until(client, State.STANDING)
        service.supply.now_v = 1.0
        until(client, State.LOWERING)
        told = until(client, State.OFF)
        assert "supply-low" in str(told["first_cause"])


def test_pulses_are_ended_before_anything_else_is_closed(tmp_path: Path, plan: FaultInjector) -> None:
    closed: list[str] = []
    with serve.Running(quick(juniper()), "simulated", tmp_path / "s", None, None, None) as running:
        plan.call_next(lambda: closed.append("pulses"), count=None)
        running._closers.insert(0, lambda: closed.append("first opened"))
        running._closers.append(lambda: closed.append("last opened"))
    assert closed == ["pulses", "pulses", "last opened", "first opened"]  # release, close


@pytest.mark.usefixtures("plan")
def test_after_a_reboot_it_wakes_where_it_was_last(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    robot, run_dir, state_dir = quick(juniper()), tmp_path / "run", tmp_path / "state"
    with (
        InThread(tmp_path, monkeypatch, state_dir=state_dir) as service,
        Client(service.socket, timeout_s=WAIT_S) as client,
    ):
        client.stand()
        until(client, State.STANDING)
        client.stop(0)
        until(client, State.STOPPED)
    posture = load_posture(state_dir, juniper())
    assert posture is not None
    for path in run_dir.iterdir():  # is in memory: a reboot empties it
        path.unlink()
    with serve.Running(robot, "simulated", run_dir / "s", state_dir, None, None) as running:
        assert running.machine.body.last_rad == pytest.approx(posture)


@pytest.mark.usefixtures("plan")
def test_what_a_kill_interrupted_is_kept_at_the_next_start(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    run_dir, state_dir = tmp_path / "run", tmp_path / "state"
    with InThread(tmp_path, monkeypatch) as service, Client(service.socket, timeout_s=WAIT_S) as client:
        client.stand()
        until(client, State.STANDING)
        left = (run_dir / RING_NAME).read_bytes()  # as a kill would leave it
    (run_dir / RING_NAME).write_bytes(left)
    with serve.Running(quick(juniper()), "simulated", run_dir / "s", state_dir, None, None):
        pass
    (kept,) = (state_dir / RECORDINGS).iterdir()
    assert kept.name.endswith("-interrupted.ring")
    assert last_state(kept) is State.STANDING


@pytest.mark.usefixtures("plan")
def test_a_client_that_sends_garbage_all_day_does_not_fill_the_log(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with serve.Running(
        quick(juniper()), "simulated", tmp_path / "s", None, tmp_path / "log", None
    ) as running:
        for _ in range(10_000):
            running._client_event("garbage", 1)
        running._client_event("dropped", 1)
    lines = [line for line in (tmp_path / "log" / LOG_NAME).read_text().splitlines() if "client 1" in line]
    assert 2 <= len(lines) <= 20
    assert "dropped" in lines[-1]
    assert "repeated 10000 times" in lines[-2]
    assert "client 1: garbage" in capsys.readouterr().err


# A process of its own

PROGRAM = """
import sys
from dataclasses import replace
from pathlib import Path
from hobnail import load_robot
from hobnail.service.serve import run
robot = load_robot(sys.argv[1])
safety = replace(robot.safety, wake_group=12, wake_interval_s=0.02, crouch_s=0.8)
robot = replace(robot, safety=safety, posture_limits=replace(robot.posture_limits, rate_m_s=0.3))
sys.exit(run(robot, driver=sys.argv[2], socket_path=Path(sys.argv[3])))
"""


class Process:
    """The service as a process, with a notification socket and chips in a file."""

    def __init__(self, directory: Path) -> None:
        self.directory = directory
        self.chips = directory / "chips"
        self.socket = directory / "hobnail.sock"
        self.manager = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self.manager.bind(str(directory / "notify"))
        self.manager.settimeout(WAIT_S)
        environment = subprocess_environment(NOTIFY_SOCKET=str(directory / "notify"), WATCHDOG_USEC="400000")
        environment.pop("WATCHDOG_PID", None)
        self.process = subprocess.Popen(
            [
                sys.executable, "-c", PROGRAM, str(CONFIG / "juniper.yaml"),
                f"chip-model:{self.chips}", str(self.socket),
            ],
            env=environment,
            stderr=subprocess.PIPE,
            text=True,
        )  # fmt: skip

    def hear(self, wanted: str) -> list[str]:
        """Notifications up to the first that has `wanted` in it."""
        heard: list[str] = []
        while not heard or wanted not in heard[-1]:
            heard.append(self.manager.recv(4096).decode())
        return heard

    def send(self, number: signal.Signals) -> None:
        self.process.send_signal(number)

    def ended(self) -> int:
        return self.process.wait(WAIT_S)

    def pulses(self) -> int:
        """How many channels of the chips in the file are not full off."""
        on = 0
        for entry in open_chip_file(str(self.chips)):
            # NXP data sheet, sec. 7.3.3: LEDn_OFF_H = 0x09 + 4 n, bit 4 is full off.
            on += sum(not entry.registers[0x09 + 4 * channel] & 0x10 for channel in range(16))
        return on


@contextmanager
def process(directory: Path) -> Iterator[Process]:
    service = Process(directory)
    try:
        yield service
    finally:
        service.process.kill()
        service.process.communicate()
        service.manager.close()


@contextmanager
def walking(directory: Path) -> Iterator[tuple[Process, Client]]:
    with process(directory) as service:
        service.hear("READY=1")
        with Client(service.socket, timeout_s=WAIT_S) as client:
            client.stand()
            until(client, State.STANDING)
            client.walk(0.1, 0.0, 0.0, ttl_s=10.0)
            until(client, State.WALKING)
            assert service.pulses() == 12
            yield service, client


def test_ready_is_said_when_the_socket_answers_and_the_watchdog_is_fed(tmp_path: Path) -> None:
    with process(tmp_path) as service:
        heard = service.hear("READY=1")
        assert len(heard) == 1  # nothing came before it
        with Client(service.socket, timeout_s=WAIT_S) as client:
            assert client.state()["state"] == "off"
        assert service.pulses() == 0
        service.hear("WATCHDOG=1")
        service.hear("WATCHDOG=1")
        service.send(signal.SIGTERM)
        service.hear("STOPPING=1")
        assert service.ended() == 0


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_to_end_lies_down_first(tmp_path: Path, number: signal.Signals) -> None:
    with walking(tmp_path) as (service, _):
        service.send(number)
        assert service.ended() == 0
        assert service.pulses() == 0
        rows = read_ring(tmp_path / RING_NAME).rows
        assert rows[-1].state is State.RESTING


def test_a_second_interrupt_cuts_at_once(tmp_path: Path) -> None:
    with walking(tmp_path) as (service, client):
        service.send(signal.SIGINT)
        until(client, State.LOWERING)
        service.send(signal.SIGINT)
        assert service.ended() == 0
        assert service.pulses() == 0
        assert last_state(tmp_path / RING_NAME) is State.LOWERING


@pytest.mark.parametrize(("number", "category"), [(signal.SIGUSR1, 1), (signal.SIGUSR2, 0)])
def test_a_signal_stops_and_the_service_goes_on(
    tmp_path: Path, number: signal.Signals, category: int
) -> None:
    with walking(tmp_path) as (service, client):
        service.send(number)
        told = until(client, State.STOPPED)
        assert told["stop"] == {"latched": True, "category": category, "reason": number.name}
        # The bus has a thread of its own: the state may be told before the boards are.
        bound_s = time.monotonic() + WAIT_S
        while service.pulses():
            assert time.monotonic() < bound_s
        service.send(signal.SIGTERM)
        assert service.ended() == 0


def test_a_killed_service_leaves_its_last_minute_and_its_boards_noted(tmp_path: Path) -> None:
    with walking(tmp_path) as (service, _):
        service.process.kill()
        service.ended()
        assert service.pulses() == 12  # a chip goes on by itself: this is what the helper is for
        assert last_state(tmp_path / RING_NAME) is State.WALKING
        assert (tmp_path / "boards").read_text() == f"model {service.chips} main\n"


def test_a_restart_wakes_nothing(tmp_path: Path) -> None:
    with walking(tmp_path) as (service, _):
        service.process.kill()
        service.ended()
    (tmp_path / "notify").unlink()
    with process(tmp_path) as service:
        service.hear("READY=1")
        service.hear("WATCHDOG=1")
        assert service.pulses() == 0
        with Client(service.socket, timeout_s=WAIT_S) as client:
            assert client.state()["state"] == "off"


def test_unknown_driver_is_refused_with_the_names_there_are(tmp_path: Path) -> None:
    with pytest.raises(DriverUnavailableError, match="chip-model, pca9685, simulated"):
        serve.run(juniper(), driver="teleport", socket_path=tmp_path / "s")
