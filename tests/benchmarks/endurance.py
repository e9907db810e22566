"""A long walk of the whole service in real time: memory must stay flat, and no tick be lost that the
machine did not take.

Prints a line each tenth of the time.  Ticks lost are compared with those that an idle
process of the same policy loses beside it: a sleeper of the same period.
Run: python tests/benchmarks/endurance.py [SECONDS] [DRIVER]
"""

from __future__ import annotations

import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from hobnail import Client

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


def main() -> None:
    """Walk, turn and change gait in turns; print memory and ticks."""
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 600.0
    driver = sys.argv[2] if len(sys.argv) > 2 else "chip-model"
    with tempfile.TemporaryDirectory(dir="/dev/shm") as folder:
        path = Path(folder) / "hobnail.sock"
        command = [sys.executable, "-m", "hobnail.cli.main", "run", str(CONFIG), "--plain"]
        command += ["--driver", driver, "--socket", str(path), "--log-dir", f"{folder}/log"]
        with subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL) as process:
            while not path.exists():
                time.sleep(0.05)
            with Client(path, timeout_s=10.0) as client:
                client.stand()
                while client.state()["state"] != "standing":
                    time.sleep(0.1)
                gaits = client.describe()["gaits"]
                assert isinstance(gaits, list)
                sleeper = subprocess.Popen(
                    [sys.executable, "-c", SLEEPER, "0.01", str(seconds)], stdout=subprocess.PIPE, text=True
                )
                began_s = time.monotonic()
                shown = 0
                print("      s   resident kB   ticks   skipped   waited   p99.9 us")
                while (now_s := time.monotonic() - began_s) < seconds:
                    if now_s >= shown * seconds / 10:
                        shown += 1
                        show(client, process.pid, now_s)
                    if int(now_s) % 20 == 0:
                        gait = gaits[int(now_s / 20) % len(gaits)]
                        client.gait(gait if isinstance(gait, str) else gait["name"])
                    client.walk(0.15 if int(now_s / 10) % 2 else -0.1, 0.0, 0.3, ttl_s=1.0)
                    time.sleep(0.05)
                show(client, process.pid, seconds)
                lost, _ = sleeper.communicate()
                print(f"an idle sleeper of the same period lost {lost.strip()} ticks meanwhile")
            process.send_signal(signal.SIGTERM)
        print(f"exit code {process.returncode}")


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
