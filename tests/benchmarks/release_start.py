"""How long the release helper takes from start to end, as a ratio to `python -c pass` in the same run.

The boards are in a chip model file, which costs more imports than a real bus
would; the second line is the helper with nothing to release.
Run: python tests/benchmarks/release_start.py
"""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import tempfile
import time

from hobnail_drivers.board_notes import note_boards
from hobnail_drivers.chip_file import make_chip_file

ROUNDS = 40


def main() -> None:
    """Measure in turn, print medians and ratios."""
    with tempfile.TemporaryDirectory() as full, tempfile.TemporaryDirectory() as empty:
        make_chip_file(f"{full}/chips", [("main", 1, 0x40, 25e6)])
        note_boards(f"{full}/boards", [f"model {full}/chips main"])
        note_boards(f"{empty}/boards", [])
        helper = [sys.executable, "-m", "hobnail_drivers.release"]
        commands = {
            "python -c pass": ([sys.executable, "-c", "pass"], empty),
            "release, one modelled board": (helper, full),
            "release, nothing noted": (helper, empty),
        }
        times: dict[str, list[float]] = {name: [] for name in commands}
        for _ in range(ROUNDS):
            for name, (command, directory) in commands.items():
                start_s = time.perf_counter()
                subprocess.run(
                    command,
                    check=True,
                    stdout=subprocess.DEVNULL,
                    env={**os.environ, "RUNTIME_DIRECTORY": directory},
                )
                times[name].append(time.perf_counter() - start_s)
    base_s = statistics.median(times["python -c pass"])
    for name, taken_s in times.items():
        median_s = statistics.median(taken_s)
        print(f"{name:30s} {median_s * 1e3:6.1f} ms   ratio {median_s / base_s:.2f}")


if __name__ == "__main__":
    main()
