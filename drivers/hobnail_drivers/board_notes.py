"""The note that the service leaves for `hobnail-release`: where its boards are, one a line.

    i2c BUS ADDRESS         i2c 1 0x40
    model PATH NAME         model /run/hobnail/chips main    (a chip model file)

The words of a line are parted by spaces; a NAME may hold some.  Lines come from
`Driver.notes()`.  An empty file says that there is nothing to release.  Kept
free of imports that take time.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping

FILE_NAME = "boards"
SYSTEM_DIRECTORY = "/run/hobnail"


def default_path(environment: Mapping[str, str] = os.environ) -> str:
    """The note beside the service's socket, wherever that is by default.

    In the directory of $HOBNAIL_SOCKET, else in $RUNTIME_DIRECTORY, else where
    the system's service keeps it if it does, else in the user's runtime directory.
    """
    if socket := environment.get("HOBNAIL_SOCKET"):
        directory = os.path.dirname(socket)
    elif runtime := environment.get("RUNTIME_DIRECTORY"):
        directory = runtime.split(":")[0]
    elif os.path.exists(os.path.join(SYSTEM_DIRECTORY, FILE_NAME)):
        directory = SYSTEM_DIRECTORY
    else:
        directory = environment.get("XDG_RUNTIME_DIR") or f"/tmp/hobnail-{os.getuid()}"
    return os.path.join(directory, FILE_NAME)


def note_boards(path: str | os.PathLike[str], notes: Iterable[str]) -> None:
    """Write `Driver.notes()` so that readers see the old note or the new one, whole.  Raises OSError."""
    part = f"{os.fspath(path)}.{os.getpid()}"
    with open(part, "w", encoding="utf-8") as file:
        file.writelines(f"{note}\n" for note in notes)
    os.replace(part, path)
