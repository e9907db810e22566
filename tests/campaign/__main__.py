"""The fault campaign: every hazard, in every state of the robot; a table of what happened, pass or fail.

    cd tests && python -m campaign [--robot NAME] [--hazard NAME]... [--state NAME]... [--jobs N]

Exit code 1 when a cell fails.  `hazards` is the table of hazards; `world` is
the robot that they happen to, `witness` what judges it by its chips' pins.
That the service manager acts on exit codes and watchdog is in tests/systemd.
"""

from __future__ import annotations

import argparse
import os
import signal
import sys
import time
import traceback
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from typing import NamedTuple

from campaign.hazards import HAZARDS, Hazard
from campaign.world import CONFIG, ROBOT, STATES

PASS, FAIL, NOT = "pass", "FAIL", "n/a"
LONGEST_S = 120  # real time for one cell: whoever waits for what never comes fails, too


class Cell(NamedTuple):
    """What came of one hazard in one state."""

    hazard: str
    state: str
    result: str
    happened: str


def try_out(hazard: Hazard, state: str) -> Cell:
    """Run one cell; whatever it raises is a fail."""
    if state in hazard.not_in:
        return Cell(hazard.name, state, NOT, hazard.not_in[state])
    signal.signal(signal.SIGALRM, _too_long)
    signal.alarm(LONGEST_S)
    try:
        return Cell(hazard.name, state, PASS, hazard.scenario(state))
    except AssertionError as error:
        return Cell(hazard.name, state, FAIL, str(error) or traceback.format_exc(limit=-1).replace("\n", " "))
    except Exception as error:  # noqa: BLE001 -- a cell that breaks is a cell that fails
        where = traceback.extract_tb(error.__traceback__)[-1]
        return Cell(
            hazard.name, state, FAIL, f"{error!r} at {os.path.basename(where.filename)}:{where.lineno}"
        )
    finally:
        signal.alarm(0)


def _too_long(*_: object) -> None:
    raise TimeoutError(f"not done within {LONGEST_S} s")


def campaign(hazards: Sequence[Hazard], states: Sequence[str], jobs: int) -> Iterator[Cell]:
    """Every cell, row by row, on so many processes."""
    with ProcessPoolExecutor(jobs) as pool:
        cells = [pool.submit(try_out, hazard, state) for hazard in hazards for state in states]
        for cell in cells:
            yield cell.result()


def matrix(cells: Sequence[Cell], states: Sequence[str]) -> list[str]:
    """The results alone, a hazard a line."""
    results = {(cell.hazard, cell.state): cell.result for cell in cells}
    names = dict.fromkeys(cell.hazard for cell in cells)
    lines = [f"{'':20}" + "".join(f"{state:>10}" for state in states)]
    lines += [f"{name:20}" + "".join(f"{results[name, state]:>10}" for state in states) for name in names]
    return lines


def main(argv: Sequence[str] | None = None) -> int:
    """Run the campaign and print it; the exit code."""
    parser = argparse.ArgumentParser(prog="python -m campaign", description=__doc__.partition("\n")[0])
    names = [hazard.name for hazard in HAZARDS]
    parser.add_argument("--hazard", action="append", choices=names, metavar="NAME", help=", ".join(names))
    parser.add_argument("--state", action="append", choices=STATES, metavar="NAME", help=", ".join(STATES))
    robots = sorted(path.stem for path in CONFIG.glob("*.yaml"))
    parser.add_argument("--robot", default="juniper", choices=robots, help="from config/ (%(default)s)")
    # One more than there are cores: some cells wait for a process of their own.
    parser.add_argument("--jobs", type=int, default=(os.cpu_count() or 1) + 1, help="processes (%(default)s)")
    asked = parser.parse_args(argv)
    os.environ[ROBOT] = asked.robot
    hazards = [hazard for hazard in HAZARDS if not asked.hazard or hazard.name in asked.hazard]
    states = [state for state in STATES if not asked.state or state in asked.state]
    began_s = time.monotonic()
    cells: list[Cell] = []
    for cell in campaign(hazards, states, asked.jobs):
        if cell.state == states[0]:
            meaning = next(hazard.meaning for hazard in hazards if hazard.name == cell.hazard)
            print(f"\n{cell.hazard}: {meaning}")
        cells.append(cell)
        print(f"    {cell.state:9} {cell.result:5} {cell.happened}", flush=True)
    failed = [cell for cell in cells if cell.result == FAIL]
    print("", *matrix(cells, states), "", sep="\n")
    tried = sum(cell.result != NOT for cell in cells)
    print(
        f"{tried} cells tried, {len(failed)} failed, {len(cells) - tried} make no sense; "
        f"{time.monotonic() - began_s:.0f} s"
    )
    for cell in failed:
        print(f"FAIL {cell.hazard} in {cell.state}: {cell.happened}")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
