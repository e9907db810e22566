"""`hobnail` as a process of its own, for the few things that cannot be seen from inside."""

from __future__ import annotations

import contextlib
import os
import subprocess
import sys


def subprocess_environment(**changes: str) -> dict[str, str]:
    """The environment for a process that must find what this one finds."""
    path = os.pathsep.join(entry for entry in sys.path if entry)
    return {**os.environ, "PYTHONPATH": path, **changes}


def hobnail(*words: str, **changes: str) -> subprocess.CompletedProcess[str]:
    """`hobnail` as a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "hobnail.cli.main", *words],
        env=subprocess_environment(**changes),
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )


def hobnail_on_a_terminal(*words: str) -> tuple[int, str]:
    """Exit code and output of `hobnail` on a terminal of 80 columns without colours."""
    main_end, terminal = os.openpty()
    with subprocess.Popen(
        [sys.executable, "-m", "hobnail.cli.main", *words],
        env=subprocess_environment(COLUMNS="80", TERM="xterm", NO_COLOR="1"),
        stdout=terminal,
    ) as process:
        os.close(terminal)
        shown = b""
        with contextlib.suppress(OSError):  # the other end is closed
            while part := os.read(main_end, 65536):
                shown += part
        os.close(main_end)
        return process.wait(timeout=60), shown.decode()
