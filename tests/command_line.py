"""`hobnail` as a process of its own, for the few things that cannot be seen from inside."""

from __future__ import annotations

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
