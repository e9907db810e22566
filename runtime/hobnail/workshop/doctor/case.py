"""The machine being looked at: what was asked for, and what one probe finds out and later ones need."""

from __future__ import annotations

import os
import shlex
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import Any

from hobnail.robot import Robot
from hobnail.service.socket_file import NAME, default_path
from hobnail.workshop.doctor.world import World

DEFAULT_DRIVER = "simulated"  # of `hobnail run`


@dataclass(slots=True)
class Case:
    """`config`, `driver` and `socket` are what was named, None: find out.  The rest is found out."""

    world: World
    unit_name: str = "hobnail"
    config: Path | None = None
    driver: str | None = None
    socket: Path | None = None
    unit: dict[str, str] = field(default_factory=dict)  # its properties; empty: not looked up
    state: dict[str, Any] | None = None  # what the running service says
    described: dict[str, Any] | None = None
    is_mute: bool = False  # something is on the socket, or the unit is active, and it does not answer
    busy_process: int | None = None  # it starts as the service, or calibrates: the boards are its
    robot: Robot | None = None
    is_hardware: bool = False  # the driver is one of real boards

    @property
    def is_installed(self) -> bool:
        """The unit is there."""
        return self.unit.get("LoadState") == "loaded"

    @property
    def is_active(self) -> bool:
        """The unit runs, or is about to."""
        return self.unit.get("ActiveState") in ("active", "activating", "reloading", "deactivating")

    @property
    def words(self) -> list[str]:
        """The command line of the unit."""
        _, found, rest = self.unit.get("ExecStart", "").partition("argv[]=")
        try:
            return shlex.split(rest.partition(" ; ")[0]) if found else []
        except ValueError:
            return []

    def socket_path(self) -> Path:
        """Where the service listens, or would."""
        if self.socket is not None:
            return self.socket
        if self.is_installed:
            return self.world.path(f"/run/{self.unit_name}/{NAME}")
        return default_path(self.world.environ)

    def config_path(self) -> Path | None:
        """The configuration: as named, as running, as the unit has it, or where the unit would look."""
        if self.config is not None:
            return self.config
        source = (self.described or {}).get("source")
        candidates = [Path(source)] if isinstance(source, str) and source else []
        candidates += [self.world.path(word) for word in self.words if word.endswith((".yaml", ".yml"))]
        candidates.append(self.world.path(f"/etc/{self.unit_name}/robot.yaml"))
        # One that the unit names and that is not there has to be told.
        named = candidates[:-1] if self.words else []
        return next((path for path in candidates if os.path.exists(path)), named[-1] if named else None)

    def driver_name(self) -> str:
        """The driver: as named, as running, as the unit has it, or what `hobnail run` takes."""
        if self.driver is not None:
            return self.driver
        running = ((self.state or {}).get("driver") or {}).get("name")
        if isinstance(running, str):
            return running
        for word, after in pairwise([*self.words, ""]):
            if word == "--driver" and after:
                return after
            if word.startswith("--driver="):
                return word.partition("=")[2]
        return DEFAULT_DRIVER
