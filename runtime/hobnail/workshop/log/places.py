"""Where a record may lie: the directories of a service, or files and directories that were copied.

Names files; `reading` opens them.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path

from hobnail.errors import EX_NOPERM, RecordError
from hobnail.service.archive import RECORDINGS
from hobnail.service.recorder import PREVIOUS_NAME, RING_NAME
from hobnail.service.socket_file import SYSTEM_PATH, default_path
from hobnail.service.writer import LOG_NAME

LOG_NAMES = (f"{LOG_NAME}.1", LOG_NAME)
RING_NAMES = (PREVIOUS_NAME, RING_NAME)
DEPTH = 4  # of directories below one that was named
MOST_FILES = 500
Place = tuple[Path, ...]  # the directories of one robot


def of_service(socket_path: str | None, environ: Mapping[str, str] = os.environ) -> list[Place]:
    """Where the service of that socket keeps its record; without one, each place where a service may."""
    if socket_path is not None:
        return [_around(Path(socket_path).absolute(), environ)]
    found = [_around(default_path(environ), environ)]
    if not environ.get("HOBNAIL_SOCKET"):
        # A service that has ended leaves no socket to find it by.
        found += [_around(SYSTEM_PATH, environ)]
        for runtime in (environ.get("XDG_RUNTIME_DIR"), f"/tmp/hobnail-{os.getuid()}"):
            if runtime:
                found.append(_around(Path(runtime) / SYSTEM_PATH.name, environ))
    return list(dict.fromkeys(found))


def _around(socket_path: Path, environ: Mapping[str, str]) -> Place:
    """The runtime directory that holds the socket, and those for state and log that go with it."""
    runtime = socket_path.parent
    places = [runtime]
    places += [Path(environ[name]) for name in ("LOGS_DIRECTORY", "STATE_DIRECTORY") if environ.get(name)]
    if runtime.parent == SYSTEM_PATH.parents[1]:  # as the unit has it: three directories of one name
        places += [Path("/var/log") / runtime.name, Path("/var/lib") / runtime.name]
    return tuple(dict.fromkeys(places))


def newest(places: Iterable[Place]) -> list[Path]:
    """The files of the place that was written to last.

    Raises RecordError when there is none, or none that this user may look into.
    """
    best: tuple[float, list[Path]] = (0.0, [])
    looked: list[str] = []
    forbidden: list[str] = []
    for place in places:
        files: list[Path] = []
        for directory in place:
            looked.append(str(directory))
            try:
                files += _of_directory(directory)
            except PermissionError:
                forbidden.append(str(directory))
            except OSError:
                continue
        written_s = max((_written_s(path) for path in files), default=0.0)
        if files and written_s > best[0]:
            best = (written_s, files)
    if best[1]:
        return best[1]
    if forbidden:
        problem = RecordError(
            f"no permission to look into {', '.join(forbidden)}: join the group of the service "
            "(`usermod -aG hobnail USER`, then log in again), or run this as root"
        )
        problem.exit_code = EX_NOPERM
        raise problem
    raise RecordError(
        f"no record found; looked in {', '.join(dict.fromkeys(looked))}. A record begins when "
        "`hobnail run` or the service starts; name a file or directory to read another one, "
        "or --socket for another robot of this machine"
    )


def named(paths: Iterable[str]) -> list[Path]:
    """The files that are named, and those of a record anywhere in directories that are.

    Raises RecordError for a directory without any, OSError for what is not there.
    """
    files: list[Path] = []
    for path in map(Path, paths):
        if not path.is_dir():
            os.stat(path)
            files.append(path)
            continue
        os.listdir(path)  # what may not be looked into is said at once
        found = list(_below(path))
        if not found:
            raise RecordError(
                f"{path}: no record in it; one has {LOG_NAME}, {RING_NAME} or files that end in .ring, "
                "as in /var/log/hobnail, /run/hobnail and /var/lib/hobnail of a robot"
            )
        files += found
    return files


def _of_directory(directory: Path) -> list[Path]:
    present = set(os.listdir(directory))
    files = [directory / name for name in (*LOG_NAMES, *RING_NAMES) if name in present]
    recordings = directory / RECORDINGS
    if RECORDINGS in present:
        files += sorted(path for path in recordings.iterdir() if path.suffix == ".ring")
    return files


def _below(directory: Path) -> Iterator[Path]:
    count = 0
    for root, folders, names in os.walk(directory):
        folders.sort()
        if len(Path(root).relative_to(directory).parts) >= DEPTH:
            folders.clear()
        for name in sorted(names, key=lambda name: (name != LOG_NAMES[0], name)):
            if name in LOG_NAMES or name.endswith(".ring"):
                count += 1
                if count > MOST_FILES:
                    return
                yield Path(root) / name


def _written_s(path: Path) -> float:
    try:
        return path.stat().st_mtime
    except OSError:
        return 0.0
