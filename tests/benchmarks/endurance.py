"""A long walk of the whole service: memory must stay flat, and no tick be lost that the machine did not take.

In real time: a line each tenth of the time; beside it runs an idle sleeper of the
same period and policy, whose lost ticks are those that the machine took.
The same in simulated time, without process and socket: `soak.py`.
Run: python tests/benchmarks/endurance.py [SECONDS] [other|fifo] [DRIVER]
"""

from __future__ import annotations

import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from hobnail import Client
from hobnail.service.realtime import FIFO_PRIORITY

CONFIG = Path(__file__).parents[2] / "config" / "juniper.yaml"

# Sleeps to absolute deadlines and counts those missed by a whole period.
SLEEPER = """
import sys, time
period, lost, k, start = float(sys.argv[1]), 0, 0, time.monotonic()
end = start + float(sys.argv[2])
while time.monotonic() < end:
    k += 1
    left = start + k * period - time.monotonic()
    if left > 0:
        time.sleep(left)
    missed = int((time.monotonic() - start - k * period) / period)
    lost += max(0, missed)
    k += max(0, missed)
print(lost)
"""


def resident_kb(pid: int) -> int:
    """Resident memory of a process."""
    status = Path(f"/proc/{pid}/status").read_text()
    return int(status.split("VmRSS:")[1].split()[0])


def walk(seconds: float, policy: str, driver: str) -> None:
    """Walk, turn and change gait in turns; print memory and ticks."""
    with tempfile.TemporaryDirectory(dir="/dev/shm") as folder:
        path = Path(folder) / "hobnail.sock"
        command = [sys.executable, "-m", "hobnail.cli.main", "run", str(CONFIG), "--plain"]
        command += ["--driver", driver, "--socket", str(path), "--log-dir", f"{folder}/log"]
        command += ["--realtime"] if policy == "fifo" else []
        before = ["chrt", "-f", str(FIFO_PRIORITY)] if policy == "fifo" else []
        sleeper = [*before, sys.executable, "-c", SLEEPER, "0.01", str(seconds)]
        process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        try:
            while not path.exists():
                time.sleep(0.05)
            with Client(path, timeout_s=10.0) as client:
                client.stand()
                while client.state()["state"] != "standing":
                    time.sleep(0.1)
                gaits = client.describe()["gaits"]
                assert isinstance(gaits, list)
                with subprocess.Popen(sleeper, stdout=subprocess.PIPE, text=True) as beside:
                    walk_about(client, process.pid, seconds, [str(gait) for gait in gaits])
                    lost, _ = beside.communicate()
                print(f"an idle sleeper of the same period and policy lost {lost.strip()} ticks meanwhile")
        finally:
            process.send_signal(signal.SIGTERM)
            print(f"exit code {process.wait()}")


def walk_about(client: Client, pid: int, seconds: float, gaits: list[str]) -> None:
    """Forward and back in curves, another gait every 20 s."""
    began_s, shown = time.monotonic(), 0
    print("      s   resident kB   ticks   skipped   waited   p99.9 us")
    while (now_s := time.monotonic() - began_s) < seconds:
        if now_s >= shown * seconds / 10:
            shown += 1
            show(client, pid, now_s)
        if int(now_s) % 20 == 0:
            client.gait(gaits[int(now_s / 20) % len(gaits)])
        client.walk(0.15 if int(now_s / 10) % 2 else -0.1, 0.0, 0.3, ttl_s=1.0)
        time.sleep(0.05)
    show(client, pid, seconds)


def main() -> None:
    """Choose by the arguments."""
    words = [*sys.argv[1:], *["600", "other", "chip-model"][len(sys.argv) - 1 :]]
    walk(float(words[0]), words[1], words[2])


def show(client: Client, pid: int, now_s: float) -> None:
    """One line."""
    timing = client.state()["timing"]
    assert isinstance(timing, dict)
    late = timing["lateness_us"]["p999"]
    print(
        f"{now_s:7.0f} {resident_kb(pid):13d} {timing['ticks']:7d} {timing['skipped']:9d} "
        f"{timing['waited']:8d} {late:10.0f}",
        flush=True,
    )


if __name__ == "__main__":
    main()
