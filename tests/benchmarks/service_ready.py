"""Time from start to READY=1 of `hobnail run`, as a ratio to `python -c "import numpy"` in the same run.

Modules are compiled once beforehand, into a cache of their own, as an
installed package has them.  Target: at most 3.
Run: python tests/benchmarks/service_ready.py [CONFIG]
"""

from __future__ import annotations

import os
import signal
import socket
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

ROUNDS = 20
CONFIG = Path(__file__).parents[2] / "config" / "juniper.yaml"


def numpy_s(environment: dict[str, str]) -> float:
    """The yardstick."""
    start_s = time.perf_counter()
    subprocess.run([sys.executable, "-c", "import numpy"], check=True, env=environment)
    return time.perf_counter() - start_s


def ready_s(config: str, driver: str, environment: dict[str, str]) -> float:
    """From fork to the datagram."""
    with tempfile.TemporaryDirectory() as folder, socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as manager:
        manager.bind(f"{folder}/notify")
        manager.settimeout(60.0)
        command = [sys.executable, "-m", "hobnail.cli.main", "run", config, "--driver", driver]
        start_s = time.perf_counter()
        with subprocess.Popen(
            [*command, "--socket", f"{folder}/hobnail.sock", "--plain"],
            env={**environment, "NOTIFY_SOCKET": f"{folder}/notify"},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        ) as process:
            heard = manager.recv(4096)
            taken_s = time.perf_counter() - start_s
            process.send_signal(signal.SIGTERM)
    if not heard.startswith(b"READY=1"):
        raise SystemExit(f"the first notification was {heard!r}")
    return taken_s


def main() -> None:
    """Measure in turn, print medians and ratios."""
    config = sys.argv[1] if len(sys.argv) > 1 else str(CONFIG)
    with tempfile.TemporaryDirectory() as cache:
        environment = {**os.environ, "PYTHONPYCACHEPREFIX": cache}
        environment.pop("PYTHONDONTWRITEBYTECODE", None)
        measures: dict[str, Callable[[], float]] = {
            'python -c "import numpy"': lambda: numpy_s(environment),
            "ready, simulated driver": lambda: ready_s(config, "simulated", environment),
            "ready, chip model": lambda: ready_s(config, "chip-model", environment),
        }
        times: dict[str, list[float]] = {name: [] for name in measures}
        for _ in range(ROUNDS + 1):
            for name, measure in measures.items():
                times[name].append(measure())
    base_s = statistics.median(times['python -c "import numpy"'][1:])
    for name, taken_s in times.items():
        median_s = statistics.median(taken_s[1:])  # the first one fills the cache
        print(f"{name:30s} {median_s * 1e3:6.1f} ms   ratio {median_s / base_s:.2f}")


if __name__ == "__main__":
    main()
