"""Running the robot: driver, machine, loop and socket wired together; start, signals and every way out.

    SIGTERM, SIGINT   lie down, pulses off, end; a second SIGINT cuts the pulses at once
    SIGUSR1           emergency stop, category 1: plant, crouch, cut; the service goes on
    SIGUSR2           emergency stop, category 0: cut at once; the service goes on

Every way out ends the pulses; that a killed process cannot do it is why the
unit runs `hobnail-release` afterwards.
"""

from __future__ import annotations

import secrets
import signal
import sys
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Self

from hobnail.config.calibration import calibration_path
from hobnail.errors import DriverUnavailableError, HobnailError
from hobnail.robot import Robot
from hobnail.service.archive import load_posture
from hobnail.service.bus import Bus
from hobnail.service.chronicle import Chronicle
from hobnail.service.drivers import open_contact, open_driver, open_monitor
from hobnail.service.errand import Errand
from hobnail.service.faults import Thinner, run_each
from hobnail.service.keeper import Keeper
from hobnail.service.loop import Loop
from hobnail.service.machine import Machine
from hobnail.service.notify import Notifier
from hobnail.service.power import StopInputWatch, SupplyWatch
from hobnail.service.realtime import go_realtime, quiet_collector, usual_collector
from hobnail.service.recorder import Recorder, last_posture
from hobnail.service.requests import Params
from hobnail.service.server import SocketServer
from hobnail.service.states import LOCAL_CLIENT, NO_PULSES
from hobnail.service.writer import LOG_BYTES, MEMORY_BYTES, EventLog, Writer
from hobnail_drivers.board_notes import FILE_NAME as NOTE_NAME
from hobnail_drivers.board_notes import note_boards
from hobnail_drivers.errors import BusError

if TYPE_CHECKING:
    from hobnail.service.route_steps import Step

BUS_WAIT_S = 10.0  # for boards that are still powering up
BUS_PAUSE_S = 0.5
CLOSE_S = 2.0  # a transfer or a disk that hangs longer is left behind
POWER_DOWN_S = 20.0  # lying down takes a few seconds; after so many, pulses are cut as they are
SHOW_EVERY_S = 0.1
OnState = Callable[[dict[str, object]], object]


class Attendant:
    """The signals and the end of a run, seen from the loop."""

    def __init__(self, machine: Machine, bus: Bus, errand: Errand | None, show: OnState | None) -> None:
        self.machine = machine
        self._bus = bus
        self._errand = errand
        self._show = show
        self._display = Writer("display", length=1) if show else None
        self._signals: deque[int] = deque(maxlen=16)
        self._closing_s: float | None = None
        self._shown_s = -1e9
        self._now_s = 0.0

    def catch_signals(self) -> Callable[[], None]:
        """Take the signals over; what is returned gives them back."""
        if threading.current_thread() is not threading.main_thread():
            return lambda: None
        numbers = (signal.SIGTERM, signal.SIGINT, signal.SIGUSR1, signal.SIGUSR2)
        before = {
            number: signal.signal(number, lambda got, _: self._signals.append(got)) for number in numbers
        }

        def give_back() -> None:
            for number, handler in before.items():
                signal.signal(number, handler)

        return give_back

    def before_tick(self, now_s: float) -> None:
        """Act on the signals that came in, and go on with the errand."""
        machine = self.machine
        while self._signals:
            number = self._signals.popleft()
            name = signal.Signals(number).name
            if number == signal.SIGUSR1:
                machine.stop(1, name, now_s)
            elif number == signal.SIGUSR2 or (number == signal.SIGINT and machine.closing):
                machine.stop(0, name, now_s)
            else:
                machine.power_down(name)
        if self._errand is not None:
            self._errand.update(machine, now_s)
        if machine.closing:
            if self._closing_s is None:
                self._closing_s = now_s
            elif now_s - self._closing_s > POWER_DOWN_S and machine.state not in NO_PULSES:
                machine.stop(0, f"lying down took longer than {POWER_DOWN_S:g} s", now_s)

    def after_tick(self, now_s: float) -> None:
        """Show the state, in a thread of its own: a terminal may stand still."""
        self._now_s = now_s
        if self._show is not None and self._display is not None and now_s - self._shown_s >= SHOW_EVERY_S:
            self._shown_s = now_s
            show, shown = self._show, self.machine.snapshot(now_s)
            self._display.put(lambda: show(shown))

    def finished(self) -> bool:
        """Nothing is left to do: asked to end, and no pulse is being sent."""
        if not self.machine.closing or self.machine.state not in NO_PULSES:
            return False
        # A board that cannot be reached must not keep the service from ending.
        overdue = self._closing_s is not None and self._now_s - self._closing_s > POWER_DOWN_S
        return self._bus.released or overdue

    def close(self) -> None:
        """Let the display show the end."""
        if self._show is not None and self._display is not None:
            show, last = self._show, self.machine.snapshot(self._now_s)
            self._display.close(CLOSE_S, lambda: show(last))


def run(
    robot: Robot,
    *,
    driver: str = "simulated",
    socket_path: Path,
    route: Sequence[Step] | None = None,
    on_state: OnState | None = None,
    state_dir: Path | None = None,
    log_dir: Path | None = None,
    realtime: bool = False,
    group: str | None = None,
) -> int:
    """Run the robot until it is told to end; the exit code, 0 or 75.

    `driver` is a name from the entry-point group, with its argument after a
    colon.  The last minute and the note for `hobnail-release` are kept in the
    socket's directory, which should be a tmpfs; what is to outlive a reboot, the
    last posture and the recordings of stops, in `state_dir`.  Log lines go to
    stderr and, as JSON, to `log_dir`, or to the socket's directory where that is
    None.  `route` is walked at once; the run then ends lying down, pulses off,
    with 0 when every step was walked and 75 when not.  `on_state` is called ten
    times a second, in a thread of its own, with what `state` tells.

    Raises DriverUnavailableError, ServiceError (the socket), CommandError (a
    route that does not fit the robot), OSError (a directory).
    """
    with Running(robot, driver, Path(socket_path), state_dir, log_dir, group) as running:
        return running.run(route, on_state, realtime)


class Running:
    """Everything that is open while the robot runs; leaving it ends the pulses first, then the rest."""

    def __init__(
        self,
        robot: Robot,
        driver: str,
        socket_path: Path,
        state_dir: Path | None,
        log_dir: Path | None,
        group: str | None,
    ) -> None:
        self._robot = robot
        self._driver_name = driver
        self._socket_path = socket_path
        self._runtime_dir = socket_path.parent
        self._state_dir = state_dir
        self._log_dir = log_dir
        self._group = group
        self._thinner = Thinner()
        self.chronicle = Chronicle(self._asked, ttl_s=robot.safety.command_ttl_s)
        self._closers: list[Callable[[], object]] = []
        self._end_pulses: Callable[[], object] = lambda: None

    def __enter__(self) -> Self:
        try:
            self._open()
        except BaseException:
            self._close()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        self._close()

    def _open(self) -> None:
        robot = self._robot
        for folder in (self._runtime_dir, self._state_dir, self._log_dir):
            if folder is not None:
                folder.mkdir(mode=0o750, parents=True, exist_ok=True)
        writer = Writer("writer")
        self._closers.append(lambda: writer.close(CLOSE_S))
        run = secrets.token_hex(4)
        limit_bytes = LOG_BYTES if self._log_dir else MEMORY_BYTES
        self.log = EventLog(
            writer, self._log_dir or self._runtime_dir, (_to_stderr,), run=run, limit_bytes=limit_bytes
        )
        driver = open_driver(self._driver_name, robot)
        note_boards(self._runtime_dir / NOTE_NAME, driver.notes())
        monitor, contact = (None, None) if driver.is_model else (open_monitor(robot), open_contact(robot))
        for device in (monitor, contact):
            if device is not None:
                self._closers.append(device.close)
        self.bus = Bus(driver, retries=robot.safety.bus_retries, monitor=monitor)
        self._end_pulses = self._close_bus
        self.bus.start()
        self._set_up()
        now_s = time.monotonic()
        last = last_posture(self._runtime_dir, robot)
        if last is None and self._state_dir is not None:
            last = load_posture(self._state_dir, robot)
        self.machine = Machine(robot, now_s=now_s, last_joints_rad=last)
        self.machine.instruments["driver"] = self._describe_driver
        self.recorder = Recorder(self._runtime_dir, robot, run, self._log_dir)
        self._closers.append(self.recorder.close)
        source = Path(robot.source)
        sources = (source, calibration_path(source)) if robot.source else ()
        self.keeper = Keeper(self.machine, writer, sources, self._runtime_dir, self._state_dir)
        if self.recorder.was_interrupted:
            self.keeper.keep_previous()
            self.log.event("start", "the run before this one did not end at rest: see `hobnail log`", now_s)
        self.server = SocketServer(
            self._socket_path,
            self._answer,
            group=self._group,
            on_event=self._client_event,
            on_gone=lambda client: self.machine.client_gone(client, time.monotonic()),
            on_error=lambda where, error: self._tell("error", where, f"{where}: {error!r}"),
        )
        self.server.open()
        self._closers.append(self.server.close)
        self.notifier = Notifier()
        self._closers.append(self.notifier.close)
        self.stop_input = (
            StopInputWatch(robot.safety.stop_input, contact.is_closed)
            if robot.safety.stop_input and contact
            else None
        )
        if driver.is_model and (robot.safety.stop_input or robot.supply.monitor_bus is not None):
            self.log.event("start", "the driver is a model: stop input and supply are not watched", now_s)

    def run(self, route: Sequence[Step] | None, on_state: OnState | None, realtime: bool) -> int:
        """Tick until told to end; the exit code."""
        errand = Errand(route) if route else None
        attendant = Attendant(self.machine, self.bus, errand, on_state)
        self._closers.append(attendant.close)
        loop = Loop(
            self.machine,
            self.bus,
            self.server,
            recorder=self.recorder,
            log=self.log,
            notifier=self.notifier,
            supply=SupplyWatch(self._robot.supply),
            stop_input=self.stop_input,
            before_tick=attendant.before_tick,
            after_tick=(self.keeper.update, attendant.after_tick),
        )
        self._closers.append(attendant.catch_signals())
        now_s = time.monotonic()
        if realtime:
            for line in go_realtime():
                self.log.event("start", line, now_s)
        quiet_collector()
        self._closers.append(usual_collector)
        name = self._robot.name
        self.log.event(
            "start",
            f"{name}: driver {self._driver_name}, socket {self._socket_path}",
            now_s,
            robot=name,
            digest=self._robot.digest,
            source=self._robot.source,
        )
        if route:
            self.log.event("command", f"walk a route of {len(route)} steps", now_s, client=LOCAL_CLIENT)
        self.notifier.ready(f"off: {name} is ready, send `stand`")
        loop.run(attendant.finished)
        self.log.event("end", self.machine.closing, time.monotonic())
        self.notifier.stopping(self.machine.closing)
        return errand.exit_code if errand else 0

    def _set_up(self) -> None:
        """Set the boards up, patiently for a while: they may be powering up still."""
        until_s = time.monotonic() + BUS_WAIT_S
        while True:
            self.bus.set_up()
            if not self.bus.wait(until_s - time.monotonic()):
                raise DriverUnavailableError(f"driver {self._driver_name}: no answer within {BUS_WAIT_S:g} s")
            error = self.bus.set_up_error
            if error is None:
                return
            if not isinstance(error, BusError) or time.monotonic() + BUS_PAUSE_S > until_s:
                raise DriverUnavailableError(f"driver {self._driver_name}: {error}") from error
            time.sleep(BUS_PAUSE_S)

    def _answer(self, method: str, params: Params, client: int) -> object:
        """Carry a client's request out, and have it in the log."""
        now_s = time.monotonic()
        try:
            answer = self.machine.request(method, params, client, now_s)
        except HobnailError as error:
            self.chronicle.refused(method, error, client, now_s)
            raise
        self.chronicle.taken(method, params if isinstance(params, dict) else {}, client, now_s)
        return answer

    def _asked(self, text: str, now_s: float, client: int) -> None:
        self.log.event("command", text, now_s, client=client, peer=self.server.peer(client))

    def _describe_driver(self) -> dict[str, object]:
        health = self.bus.health
        return {
            "name": self._driver_name,
            "simulated": self.bus.driver.is_model,
            "frame_hz": dict(health.frame_hz) if health else {},
            "frames": self.bus.frames,
        }

    def _tell(self, kind: str, key: str, text: str) -> None:
        """A log line, unless there were many of that key: clients can make as many as they like."""
        now_s = time.monotonic()
        line = self._thinner.line(key, text, now_s)
        if line is not None:
            self.log.event(kind, line, now_s)

    def _client_event(self, name: str, client_id: int) -> None:
        if name == "flood":
            self.machine.report("client-flood", time.monotonic(), f"client {client_id}")
        else:
            self._tell("client", name, f"client {client_id}: {name}")

    def _close_bus(self) -> None:
        if not self.bus.close(CLOSE_S):
            raise TimeoutError("a transfer hangs; the pulses may still be on: run `hobnail-release`")
        for event in self.bus.events():
            _to_stderr(f"{event.fault}: {event.detail}")

    def _close(self) -> None:
        # Pulses first, and each step by itself, so that one that fails keeps none from its turn.
        for error in run_each((self._end_pulses, *reversed(self._closers))):
            _to_stderr(f"while ending: {error}")


def _to_stderr(line: str) -> None:
    print(line, file=sys.stderr, flush=True)
