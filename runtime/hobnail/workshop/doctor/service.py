"""Probes of the service: unit, socket, faults, directories, what was left over, how the last run ended.

Asks the service for its state, as any client may; commands nothing.
"""

from __future__ import annotations

import os
import re
import stat
import subprocess
from collections.abc import Iterator
from pathlib import Path

from hobnail.errors import EX_CONFIG, EX_UNAVAILABLE, HobnailError, ServiceTimeoutError
from hobnail.service.recorder import RING_NAME, last_state
from hobnail.service.socket_file import NAME
from hobnail.service.states import State
from hobnail.workshop.doctor.case import Case
from hobnail.workshop.doctor.findings import Finding, fine, mend, note
from hobnail.workshop.doctor.world import User

LITTLE_BYTES, TOO_LITTLE_BYTES = 200_000_000, 20_000_000  # of free space
ANYBODY = User("somebody", 0, frozenset())
_LEFT_OVER = re.compile(r"\.(\d+)|.*\.part|boards\.(\d+)")


def unit(case: Case) -> Iterator[Finding]:
    """The unit: installed, enabled, active."""
    name = case.unit_name
    try:
        found = case.world.show_unit(name)
    except (OSError, subprocess.TimeoutExpired) as error:
        yield note("unit", f"the service manager does not answer: {error}", "`systemctl status` shows more")
        return
    if found is None:
        yield note(
            "unit", "this machine is not run by systemd: start `hobnail run` by hand, or by your own means"
        )
        return
    case.unit = found
    if not case.is_installed:
        yield note(
            "unit",
            f"{name}.service is not installed ({found.get('LoadState', 'not known')}); `hobnail run` by hand "
            "works without it",
            'README, "Install on a robot"',
        )
        return
    enabled = found.get("UnitFileState", "")
    if not enabled.startswith("enabled"):
        yield note(
            "unit",
            f"{name}.service is {enabled or 'not enabled'}: it does not start with the machine",
            f"`systemctl enable {name}`",
        )
    if found.get("NeedDaemonReload") == "yes":
        yield note("unit", "its file changed since it was read", "`systemctl daemon-reload`, then restart it")
    yield _activity(case, name, found)
    restarts = found.get("NRestarts", "0")
    if restarts not in ("", "0"):
        yield note("unit", f"it was started again {restarts} times after failing", "`hobnail log` tells why")


def _activity(case: Case, name: str, found: dict[str, str]) -> Finding:
    state, result = found.get("ActiveState", ""), found.get("Result", "")
    code = found.get("ExecMainStatus", "")
    if state == "active":
        return fine("unit", f"{name}.service is active, {found.get('UnitFileState')}")
    if state == "failed":
        reasons = {
            str(EX_CONFIG): "the configuration is wrong",
            str(EX_UNAVAILABLE): "no board or driver was there",
        }
        why = "the program hung" if result == "watchdog" else reasons.get(code, f"exit code {code}")
        return mend(
            "unit",
            f"{name}.service has failed ({result}): {why}",
            f"`journalctl -u {name}` says more; then `systemctl reset-failed {name}`, and start it",
        )
    if case.is_active:
        return note("unit", f"{name}.service is {state} ({found.get('SubState')})", "look again in a moment")
    return note("unit", f"{name}.service does not run ({state})", f"`systemctl start {name}`")


def answer(case: Case) -> Iterator[Finding]:
    """The socket: there, answering, and what the robot says of itself."""
    path = case.socket_path()
    case.busy_process = _starting_or_calibrating(case, path.parent)
    if case.busy_process is not None:
        yield note(
            "socket",
            f"process {case.busy_process} starts as the service, or calibrates: it has locked {path.parent}",
            "look again when it is done",
        )
    try:
        kind = os.lstat(path).st_mode
    except FileNotFoundError:
        case.is_mute = case.is_active
        if case.is_active:
            yield mend(
                "socket", f"the unit is active, but there is no {path}", f"`journalctl -u {case.unit_name}`"
            )
        else:
            yield fine("socket", f"no service runs: there is no {path}")
        return
    except PermissionError:
        case.is_mute = True
        yield mend("socket", f"this user may not look into {path.parent}", _join(case))
        return
    if not stat.S_ISSOCK(kind):
        yield mend("socket", f"{path} is no socket, and keeps the service from making one", "remove it")
        return
    try:
        case.state, case.described = case.world.ask(path)
    except HobnailError as error:
        yield _mute(case, path, error)
        return
    yield from _well(case, path)


def _starting_or_calibrating(case: Case, folder: Path) -> int | None:
    """The process that holds the lock on the socket's directory, by proc(5): to try the lock would hold
    up a start at that very moment."""
    try:
        status = folder.stat()
        locks = case.world.path("/proc/locks").read_text().splitlines()
    except OSError:
        return None
    place = f"{os.major(status.st_dev):02x}:{os.minor(status.st_dev):02x}:{status.st_ino}"
    for words in map(str.split, locks):
        if len(words) == 8 and words[1] == "FLOCK" and words[3] == "WRITE" and words[5] == place:
            return int(words[4])
    return None


def _mute(case: Case, path: Path, error: HobnailError) -> Finding:
    if isinstance(error.__cause__, ConnectionRefusedError) and not case.is_active:
        return note(
            "socket",
            f"{path} is stale: its program was killed; nothing answers there",
            "the next start replaces it by itself; `hobnail log` tells of that end",
        )
    case.is_mute = True
    if isinstance(error.__cause__, PermissionError):
        return mend("socket", f"this user may not open {path}", _join(case))
    if isinstance(error, ServiceTimeoutError):
        return mend(
            "socket", f"{path}: no answer in time: it hangs or is overloaded", f"restart it: {_restart(case)}"
        )
    return mend("socket", str(error), f"look at its log, then restart it: {_restart(case)}")


def _restart(case: Case) -> str:
    return (
        f"`systemctl restart {case.unit_name}`" if case.is_installed else "end `hobnail run`, start it again"
    )


def _join(case: Case) -> str:
    group = case.unit.get("User") or "hobnail"
    return f"`usermod -aG {group} USER`, then log in again; or run this as root"


def _well(case: Case, path: Path) -> Iterator[Finding]:
    told = case.state or {}
    holder = (told.get("command") or {}).get("holder")
    who = "nobody commands it" if holder is None else f"client {holder} commands it"
    yield fine("socket", f"{path}: {told.get('robot')} is {told.get('state')}, {who}")
    about = told.get("driver") or {}
    if about.get("simulated"):
        yield note("servos", f"driver {about.get('name')} is a model: nothing moves in the room")
    stop = told.get("stop") or {}
    if stop.get("latched"):
        yield mend(
            "stop",
            f"category {stop.get('category')}, latched: {stop.get('reason') or 'no reason given'}",
            "look at the robot, then `hobnail reset`, then `hobnail stand`",
        )
    for fault in told.get("faults") or []:
        severity = fault.get("severity")
        grade = note if severity == "warn" else mend
        yield grade(
            "fault", f"{fault.get('name')} ({severity}): {fault.get('message')}", str(fault.get("next"))
        )
    if not told.get("faults") and not stop.get("latched"):
        yield fine("fault", "none latched")


def directories(case: Case) -> Iterator[Finding]:
    """Where the service writes: writable by its user, and with room."""
    if not case.is_installed:
        folder = case.socket_path().parent
        # Whose a running service is, is not known here: that it may write there, its socket shows.
        user = case.world.find_user(None) if case.state is None else ANYBODY
        if folder.is_dir():
            yield _directory(case, folder, user)
        return
    try:
        user = case.world.find_user(case.unit.get("User") or None)
    except KeyError:
        yield mend(
            "directories",
            f"there is no user {case.unit.get('User')}, whom the unit names",
            "install systemd/hobnail.sysusers, then `systemd-sysusers`",
        )
        return
    for above in ("/run", "/var/lib", "/var/log"):
        yield _directory(case, case.world.path(f"{above}/{case.unit_name}"), user)


def _directory(case: Case, folder: Path, user: User) -> Finding:
    try:
        status = folder.stat()
        free = case.world.free_bytes(folder)
    except FileNotFoundError:
        return fine("directories", f"{folder} is not there yet: the first start makes it")
    except OSError as error:
        return note("directories", f"{folder}: {error.strerror}", "run this as root to see more")
    mode = status.st_mode
    may = (
        user.uid == 0
        or (status.st_uid == user.uid and mode & stat.S_IWUSR)
        or (status.st_gid in user.groups and mode & stat.S_IWGRP)
        or mode & stat.S_IWOTH
    )
    if not may:
        return mend(
            "directories",
            f"{user.name} may not write to {folder} ({stat.filemode(mode)})",
            f"`chown -R {user.name}: {folder}`" if case.is_installed else "another place for it: --socket",
        )
    room = f"{free / 1e6:.0f} MB free"
    if free < TOO_LITTLE_BYTES:
        return mend("directories", f"{folder}: {room}: the record cannot be written", "make room there")
    if free < LITTLE_BYTES:
        return note("directories", f"{folder}: {room}", "make room there before it is full")
    who = "" if user is ANYBODY else f"{user.name} may write, "
    return fine("directories", f"{folder}: {who}{room}")


def leftovers(case: Case) -> Iterator[Finding]:
    """What programs that were killed left behind, and how the last run ended."""
    if case.state is not None or case.is_mute:
        return
    folder = case.socket_path().parent
    try:
        names = sorted(os.listdir(folder))
    except OSError:
        return
    if NAME in names or RING_NAME in names:
        stale = [name for name in names if _LEFT_OVER.fullmatch(name)]
        if stale:
            yield note(
                "left over", f"{folder}: {', '.join(stale)}, of programs that were killed", "remove them"
            )
    last = last_state(folder / RING_NAME)
    if last not in (None, State.RESTING):
        yield note(
            "last run", f"it did not end at rest: its last tick with pulses was {last}", "`hobnail log`"
        )
