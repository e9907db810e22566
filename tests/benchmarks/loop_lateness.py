"""Wake-up lateness of the running loop beside `cyclictest` (Debian's rt-tests), in turns, in one run.

The robot walks.  Cases: alone; while one client sends
2000 requests a second and another never reads its watch.  Policy `other` needs no
rights; `fifo` does.  Target: p99.9 at most 3 times that of cyclictest at the same rate and
policy.  Both are measured in slices that take turns, so that what else the machine
does falls on both alike.
Run: python tests/benchmarks/loop_lateness.py [SECONDS] [other|fifo] [simulated|chip-model]
"""

from __future__ import annotations

import contextlib
import json
import math
import os
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

from hobnail import Client, load_robot
from hobnail.service.realtime import FIFO_PRIORITY

CONFIG = Path(__file__).parents[2] / "config" / "juniper.yaml"
SLICES = 6
FLOOD_HZ = 2000.0
SHARES = (0.5, 0.99, 0.999)

# Runs one slice and prints every tick's lateness: `state` gives a histogram only.
PROGRAM = """
import json, sys
from pathlib import Path
from hobnail import load_robot
from hobnail.service import timing
late = []
add = timing.Lateness.add
timing.Lateness.add = lambda self, late_s: (late.append(late_s), add(self, late_s))[1]
from hobnail.service.serve import run
robot, path, realtime = load_robot(sys.argv[1]), Path(sys.argv[2]), sys.argv[3] == "fifo"
code = run(robot, driver=sys.argv[5], socket_path=path, realtime=realtime)
Path(sys.argv[4]).write_text(json.dumps(late))
sys.exit(code)
"""


def cyclictest(seconds: float, period_us: int, policy: str) -> list[float]:
    """Latencies, us."""
    command = [
        "cyclictest",
        "-q",
        "-h",
        "100000",
        "-i",
        str(period_us),
        "-l",
        str(int(seconds * 1e6 / period_us)),
    ]
    command += ["-p", str(FIFO_PRIORITY), "-m"] if policy == "fifo" else ["--policy=other"]
    text = subprocess.run(command, check=True, capture_output=True, text=True).stdout
    latencies: list[float] = []
    for line in text.splitlines():
        if line and line[0].isdigit():
            value, count = line.split()[:2]
            latencies += [float(value)] * int(count)
    return latencies


@contextlib.contextmanager
def disturbed(path: Path, disturbing: bool) -> Iterator[None]:
    """One client that floods and one that never reads, for as long as the block lasts."""
    if not disturbing:
        yield
        return
    over = threading.Event()
    line = json.dumps({"jsonrpc": "2.0", "id": 1, "method": "state"}).encode() + b"\n"

    def flood() -> None:
        while not over.is_set():
            with contextlib.suppress(OSError), socket.socket(socket.AF_UNIX) as link:
                link.connect(str(path))
                link.settimeout(0.01)
                while not over.wait(10 / FLOOD_HZ):
                    link.send(line * 10)
                    with contextlib.suppress(TimeoutError):
                        link.recv(1 << 20)

    def never_read() -> None:
        while not over.is_set():
            with contextlib.suppress(OSError), socket.socket(socket.AF_UNIX) as link:
                link.connect(str(path))
                link.send(b'{"jsonrpc":"2.0","id":1,"method":"watch","params":{"rate_hz":100}}\n')
                over.wait(1.0)

    threads = [threading.Thread(target=action) for action in (flood, never_read)]
    for thread in threads:
        thread.start()
    try:
        yield
    finally:
        over.set()
        for thread in threads:
            thread.join()


def service(
    seconds: float, policy: str, driver: str, disturbing: bool
) -> tuple[list[float], dict[str, object]]:
    """Lateness of every tick while the robot walked, us; and what `state` told at the end."""
    with tempfile.TemporaryDirectory(dir="/dev/shm") as folder:
        path, out = Path(folder) / "hobnail.sock", Path(folder) / "late.json"
        command = [sys.executable, "-c", PROGRAM, str(CONFIG), str(path), policy, str(out), driver]
        with subprocess.Popen(command, stderr=subprocess.DEVNULL) as process:
            while not path.exists():
                time.sleep(0.05)
            with Client(path, timeout_s=30.0) as client:
                client.stand()
                while client.state()["state"] != "standing":
                    time.sleep(0.05)
                first = ticks(client)
                with disturbed(path, disturbing):
                    end_s = time.monotonic() + seconds
                    while time.monotonic() < end_s:
                        client.walk(0.1, 0.0, 0.1, ttl_s=5.0)
                        time.sleep(0.1)
                    told = client.state()
                last = ticks(client)
            process.send_signal(signal.SIGTERM)
        late_s = json.loads(out.read_text())
    return [max(0.0, value) * 1e6 for value in late_s[first:last]], told


def ticks(client: Client) -> int:
    """How many there were so far."""
    timing = client.state()["timing"]
    assert isinstance(timing, dict)
    return int(timing["ticks"])


def percentile(values: list[float], share: float) -> float:
    """The smallest value that at least `share` of them are not above."""
    return sorted(values)[max(0, math.ceil(share * len(values)) - 1)]


def main() -> None:
    """Measure in turns, print a table."""
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 60.0
    policy = sys.argv[2] if len(sys.argv) > 2 else "other"
    driver = sys.argv[3] if len(sys.argv) > 3 else "simulated"
    period_us = round(load_robot(CONFIG).period_s * 1e6)
    skipped = {"alone": 0, "disturbed": 0}
    measures: dict[str, Callable[[], list[float]]] = {
        "cyclictest": lambda: cyclictest(seconds / SLICES, period_us, policy)
    }
    for name in skipped:

        def measure(name: str = name) -> list[float]:
            late_us, told = service(seconds / SLICES, policy, driver, name == "disturbed")
            timing = told["timing"]
            assert isinstance(timing, dict)
            skipped[name] += int(timing["skipped"])
            return late_us

        measures[name] = measure
    values: dict[str, list[float]] = {name: [] for name in measures}
    for _ in range(SLICES):
        for name, measure_slice in measures.items():
            values[name] += measure_slice()
    load = os.getloadavg()[0]
    print(f"period {period_us} us, policy {policy}, driver {driver}, {seconds:g} s each, load {load:.1f}; us")
    print(f"{'':12s}   ticks      p50      p99    p99.9      max  p99.9 ratio skipped")
    base = percentile(values["cyclictest"], 0.999)
    for name, late_us in values.items():
        shown = " ".join(f"{percentile(late_us, share):8.0f}" for share in SHARES)
        ratio = percentile(late_us, 0.999) / base
        print(
            f"{name:12s} {len(late_us):7d} {shown} {max(late_us):8.0f}  {ratio:11.2f} {skipped.get(name, 0)}"
        )


if __name__ == "__main__":
    main()
