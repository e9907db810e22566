"""Probes of the robot: configuration, calibration, driver, bus devices, boards, GPIO lines.

Nothing is written to a board, and none is touched while a service may hold it.
"""

from __future__ import annotations

import stat
from collections.abc import Iterator
from datetime import datetime

from hobnail.config import load_robot
from hobnail.config.calibration import calibration_path
from hobnail.errors import ConfigError, DriverUnavailableError
from hobnail.service.drivers import make_driver
from hobnail.workshop.doctor.case import Case
from hobnail.workshop.doctor.findings import Finding, fine, mend, note
from hobnail.workshop.doctor.world import User
from hobnail_drivers.errors import BusError, DriverError, MissingLibraryError

OURS = ("hobnail", "hobnail-stop")  # what the service calls itself on a GPIO line
SHOWN = 3  # problems of a file; `hobnail check` tells all


def configuration(case: Case) -> Iterator[Finding]:
    """The configuration, with its calibration where there is one."""
    path = case.config_path()
    if path is None:
        yield note(
            "configuration",
            "none named, and none where a service would have it: what hangs on it is not looked at",
            "`hobnail doctor my-robot.yaml`",
        )
        return
    try:
        case.robot = load_robot(path)
    except ConfigError as error:
        for problem in error.problems[:SHOWN]:
            yield mend("configuration", str(problem), f"`hobnail check {path}`")
        if len(error.problems) > SHOWN:
            more = len(error.problems) - SHOWN
            yield mend("configuration", f"{more} more to mend", f"`hobnail check {path}`")
        return
    yield fine("configuration", f"{path}: {case.robot.name}, {len(case.robot.joints)} servos")


def calibration(case: Case) -> Iterator[Finding]:
    """What was measured on the bench, where real servos are driven; that it is valid is known by now."""
    path = case.config_path()
    if path is None or case.robot is None or not case.is_hardware:
        return
    beside = calibration_path(path)
    try:
        written = datetime.fromtimestamp(beside.stat().st_mtime).astimezone()
    except FileNotFoundError:
        yield note(
            "calibration",
            f"there is no {beside.name}: horns and boards are taken to be as designed",
            f"`hobnail calibrate {path}`, on the bench, before it walks",
        )
    else:
        yield fine("calibration", f"{beside.name}, last changed {written:%Y-%m-%d %H:%M}")


def driver(case: Case) -> Iterator[Finding]:
    """The driver: known, importable, and of real boards or of a model."""
    name = case.driver_name()
    try:
        kind, _ = case.world.find_driver(name)
    except DriverUnavailableError as error:
        yield mend("driver", str(error), "correct the name after --driver, or install the driver's package")
        return
    case.is_hardware = not kind.is_model
    if kind.is_model:
        yield fine("driver", f"{name}: a model, no hardware is needed and none is looked for")
    else:
        yield fine("driver", f"{name}: real boards")


def devices(case: Case) -> Iterator[Finding]:
    """The device files of the buses, and whether the service's user may use them."""
    if not case.is_hardware or case.robot is None:
        return
    user = case.world.find_user(case.unit.get("User") or None) if case.is_installed else None
    user = user or case.world.find_user(None)
    groups = set(user.groups)
    for name in case.unit.get("SupplementaryGroups", "").split():
        groups.add(number if (number := case.world.group_number(name)) is not None else -1)
    buses = {board.bus for board in case.robot.boards}
    if case.robot.supply.monitor_bus is not None:
        buses.add(case.robot.supply.monitor_bus)
    for bus in sorted(buses):
        yield _device(case, f"/dev/i2c-{bus}", User(user.name, user.uid, frozenset(groups)))


def _device(case: Case, name: str, user: User) -> Finding:
    try:
        status = case.world.path(name).stat()
    except OSError as error:
        return mend(
            "bus",
            f"{name}: {error.strerror}",
            "switch I2C on in the computer's set-up, `modprobe i2c-dev`, or correct the bus number",
        )
    mode = status.st_mode
    may = (
        user.uid == 0
        or (status.st_uid == user.uid and mode & stat.S_IRUSR and mode & stat.S_IWUSR)
        or (status.st_gid in user.groups and mode & stat.S_IRGRP and mode & stat.S_IWGRP)
        or (mode & stat.S_IROTH and mode & stat.S_IWOTH)
    )
    if may:
        return fine("bus", f"{name} is there, and {user.name} may use it")
    return mend(
        "bus",
        f"{user.name} may not use {name} ({stat.filemode(mode)})",
        "install systemd/hobnail.rules, then `usermod -aG i2c USER` and log in again",
    )


def boards(case: Case) -> Iterator[Finding]:
    """Every board, through its driver, reading only."""
    if not case.is_hardware:
        return
    if case.state is not None:
        about = case.state.get("driver") or {}
        rates = ", ".join(f"{name} {rate:.1f} Hz" for name, rate in (about.get("frame_hz") or {}).items())
        told = f"not looked at: the service holds them; it says {rates or 'nothing of them'}"
        yield fine("boards", f"{told}, {about.get('frames', 0)} frames sent")
        return
    if case.busy_process is not None:
        yield note("boards", f"not looked at: process {case.busy_process} may hold them", "see socket, above")
        return
    if case.is_mute:
        yield note(
            "boards",
            "not looked at: a service may hold them, and it does not answer",
            "stop the service, then run this again",
        )
        return
    if case.robot is None:
        yield note("boards", "not looked at: there is no configuration that says where they are")
        return
    kind, argument = case.world.find_driver(case.driver_name())
    try:
        sights = make_driver(kind, case.robot, argument).survey()
    except MissingLibraryError as error:
        yield mend("boards", f"not looked at: {error}", "`pip install 'hobnail[hardware]'`")
        return
    except DriverError as error:
        yield mend("boards", str(error), "correct the configuration")
        return
    if not sights:
        yield note("boards", f"driver {case.driver_name()} cannot look at its boards without driving them")
    for sight in sights:
        if sight.problem:
            yield mend("boards", f"board {sight.board}, {sight.found}: {sight.problem}", sight.next)
        else:
            yield fine("boards", f"board {sight.board}, {sight.found}")


def lines(case: Case) -> Iterator[Finding]:
    """The GPIO lines of stop input and output enable: there, and free or held by the service."""
    if not case.is_hardware or case.robot is None:
        return
    wanted: dict[tuple[str, int], str] = {}
    stop = case.robot.safety.stop_input
    if stop is not None:
        wanted[stop.chip, stop.line] = "stop input"
    for board in case.robot.boards:
        if board.output_enable is not None:
            wanted[board.output_enable] = f"output enable of board {board.name}"
    for (chip, line), what in wanted.items():
        where = f"{what}, {chip} line {line}"
        try:
            holder = case.world.line_user(chip, line)
        except (BusError, MissingLibraryError) as error:
            advice = (error.strerror if isinstance(error, BusError) else None) or str(error)
            yield mend("lines", f"{where} cannot be looked at", advice)
            continue
        runs = case.state is not None or case.is_mute
        if holder is None:
            held = "free" if not runs else "free, though the service runs"
            yield (note if runs else fine)("lines", f"{where}: {held}")
        elif runs and holder in OURS:
            yield fine("lines", f"{where}: held by the service")
        else:
            yield mend("lines", f"{where}: held by {holder}", "end what holds it: `gpioinfo` shows it")
