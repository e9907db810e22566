"""The fault campaign as its command runs it; the table that it prints is shown, whatever comes of it."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from command_line import subprocess_environment

pytestmark = pytest.mark.slow


def test_every_hazard_in_every_state(capfd: pytest.CaptureFixture[str]) -> None:
    done = subprocess.run(
        [sys.executable, "-m", "campaign"],
        cwd=Path(__file__).parents[1],
        env=subprocess_environment(),
        capture_output=True,
        text=True,
        check=False,
        timeout=600,
    )
    with capfd.disabled():
        print(done.stdout, done.stderr)
    assert done.returncode == 0


def test_a_cell_that_fails_ends_with_exit_code_1() -> None:
    """A robot that cannot be brought into a state at all."""
    program = (
        "import sys; from campaign import acts, __main__;"
        "acts.WAYS_IN['off'] = lambda world: 1 / 0;"
        "sys.exit(__main__.main(['--hazard', 'bus-flaky', '--state', 'off', '--state', 'resting']))"
    )
    done = subprocess.run(
        [sys.executable, "-c", program],
        cwd=Path(__file__).parents[1],
        env=subprocess_environment(),
        capture_output=True,
        text=True,
        check=False,
        timeout=600,
    )
    assert done.returncode == 1, done.stdout + done.stderr
    assert "FAIL bus-flaky in off: ZeroDivisionError" in done.stdout
    assert "1 failed" in done.stdout
