"""What is kept over a reboot: the last posture (rad) and the recordings of stops.  Files on a disk.

For the writer's thread: every function here may block.  `hobnail.service.recorder`
keeps the last minute in memory; this copies from it.
"""

from __future__ import annotations

import json
import math
import os
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path

from hobnail.robot import Robot
from hobnail.service.recorder import last_state

POSTURE_NAME = "posture.json"
RECORDINGS = "recordings"
KEPT = 20  # recordings; older ones are deleted


def save_posture(directory: Path, robot: Robot, joints_rad: Sequence[float]) -> None:
    """Keep the posture, atomically, on the disk when this returns.  Raises OSError."""
    path = directory / POSTURE_NAME
    part = path.with_suffix(".part")
    with part.open("w") as file:
        json.dump({"robot": robot.name, "digest": robot.digest, "joints_rad": list(joints_rad)}, file)
        file.flush()
        os.fsync(file.fileno())
    part.replace(path)


def load_posture(directory: Path, robot: Robot) -> tuple[float, ...] | None:
    """The posture kept for this very configuration; None when there is none that can be used."""
    try:
        kept = json.loads((directory / POSTURE_NAME).read_text())
        joints = tuple(float(angle) for angle in kept["joints_rad"])
    except (OSError, ValueError, TypeError, KeyError):
        return None
    usable = kept.get("digest") == robot.digest and len(joints) == len(robot.joints)
    return joints if usable and all(map(math.isfinite, joints)) else None


def keep_recording(ring: Path, directory: Path, name: str, wall_s: float) -> Path | None:
    """Copy a ring file into `directory`/recordings; None when it has no rows.  Raises OSError."""
    if last_state(ring) is None:
        return None
    folder = directory / RECORDINGS
    folder.mkdir(mode=0o750, exist_ok=True)
    stamp = datetime.fromtimestamp(wall_s, UTC).strftime("%Y%m%dT%H%M%S.%f")[:-3]
    kept = folder / f"{stamp}-{name}.ring"
    kept.write_bytes(ring.read_bytes())
    for old in sorted(folder.glob("*.ring"))[:-KEPT]:
        old.unlink(missing_ok=True)
    return kept
