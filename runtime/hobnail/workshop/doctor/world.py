"""What the probes see of the machine, as functions, so that tests can show them another one."""

from __future__ import annotations

import grp
import os
import pwd
import resource
import shutil
import subprocess
import sys
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from importlib import metadata
from pathlib import Path
from typing import Any

from hobnail.service.client import Client
from hobnail.service.drivers import find_driver
from hobnail_drivers.contract import Driver
from hobnail_drivers.gpio import line_user

SHOW_S = 4.0  # for the service manager to answer
ASK_S = 2.0  # for the service
SHOWN = (
    *("LoadState", "UnitFileState", "ActiveState", "SubState", "Result", "NRestarts", "NeedDaemonReload"),
    *("ExecStart", "ExecMainStatus", "MainPID", "User", "SupplementaryGroups", "LimitRTPRIO", "LimitMEMLOCK"),
)


@dataclass(frozen=True, slots=True)
class User:
    """A user of the machine: number, groups."""

    name: str
    uid: int
    groups: frozenset[int]


def show_unit(unit: str) -> dict[str, str] | None:
    """Properties of a unit; None on a machine that systemd does not run.  Raises OSError, TimeoutExpired."""
    if not Path("/run/systemd/system").is_dir():
        return None
    words = ["systemctl", "show", "--no-pager", f"--property={','.join(SHOWN)}", "--", unit]
    done = subprocess.run(
        words, stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=SHOW_S, check=False
    )
    if done.returncode:
        raise OSError(0, f"systemctl: {done.stderr.strip() or f'exit code {done.returncode}'}")
    pairs = (line.partition("=") for line in done.stdout.splitlines())
    return {key: value for key, _, value in pairs}


def ask(path: Path) -> tuple[dict[str, Any], dict[str, Any]]:
    """`state` and `describe` of the service on that socket.  Raises HobnailError."""
    with Client(path, timeout_s=ASK_S) as client:
        return client.state(), client.describe()


def find_user(name: str | None) -> User:
    """A user by name, None for whoever runs this.  Raises KeyError when there is none."""
    if name is None:
        groups = frozenset({os.getegid(), *os.getgroups()})
        try:
            own = pwd.getpwuid(os.geteuid()).pw_name
        except KeyError:
            own = str(os.geteuid())
        return User(own, os.geteuid(), groups)
    entry = pwd.getpwnam(name)
    return User(name, entry.pw_uid, frozenset(os.getgrouplist(name, entry.pw_gid)))


def group_number(name: str) -> int | None:
    """The number of a group; None when there is none of that name."""
    try:
        return grp.getgrnam(name).gr_gid
    except KeyError:
        return None


def installed(distribution: str) -> str | None:
    """The version of a package; None when it is not there."""
    try:
        return metadata.version(distribution)
    except metadata.PackageNotFoundError:
        return None


def required() -> list[str]:
    """What hobnail's own package says that it needs; nothing when it is run from its source."""
    try:
        return metadata.requires("hobnail") or []
    except metadata.PackageNotFoundError:
        return []


@dataclass(frozen=True, slots=True)
class World:
    """The machine.  `root` is put before every path that is looked at."""

    root: Path = Path("/")
    environ: Mapping[str, str] = field(default_factory=lambda: os.environ)
    python: tuple[int, ...] = field(default_factory=lambda: tuple(sys.version_info[:3]))
    show_unit: Callable[[str], dict[str, str] | None] = show_unit
    ask: Callable[[Path], tuple[dict[str, Any], dict[str, Any]]] = ask
    find_driver: Callable[[str], tuple[type[Driver], str]] = find_driver
    line_user: Callable[[str, int], str | None] = line_user
    find_user: Callable[[str | None], User] = find_user
    group_number: Callable[[str], int | None] = group_number
    installed: Callable[[str], str | None] = installed
    required: Callable[[], list[str]] = required
    limit: Callable[[int], int] = lambda kind: resource.getrlimit(kind)[0]
    policy: Callable[[int], int] = os.sched_getscheduler
    free_bytes: Callable[[Path], int] = lambda path: shutil.disk_usage(path).free
    wall_s: Callable[[], float] = time.time

    def path(self, name: str | Path) -> Path:
        """A path of the machine."""
        return self.root / str(name).lstrip("/")
