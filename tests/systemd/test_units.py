"""The unit files: what systemd's own tools say of them, and their times and codes against the program's.

Needs no systemd running; what runs under one is in the other files here.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
from pathlib import Path

import pytest

from hobnail import errors
from hobnail.cli.main import command
from hobnail.robot import Safety
from hobnail.service import realtime, serve
from hobnail_drivers import release

UNITS = Path(__file__).parents[2] / "systemd"
SECURITY_LIMIT = 1.5  # the project's own target; an unprotected unit has 9.6


def sections(name: str) -> dict[str, list[str]]:
    """Every `Key=value` of a unit file by key, in order, whatever its section."""
    found: dict[str, list[str]] = {}
    for line in (UNITS / name).read_text().splitlines():
        if line and line[0] not in "#[":
            key, _, value = line.partition("=")
            found.setdefault(key, []).append(value)
    return found


def seconds(unit: dict[str, list[str]], key: str) -> float:
    (value,) = unit[key]
    return float(value)


@pytest.fixture(scope="module")
def unit() -> dict[str, list[str]]:
    return sections("hobnail.service")


@pytest.fixture(scope="module")
def analyze() -> str:
    found = shutil.which("systemd-analyze")
    if found is None:
        if os.environ.get("CI"):
            pytest.fail("systemd-analyze is missing: install the package systemd")
        pytest.skip("systemd-analyze is missing: install the package systemd")
    return found


def test_template_is_the_same_file() -> None:
    assert (UNITS / "hobnail@.service").read_bytes() == (UNITS / "hobnail.service").read_bytes()


def test_every_path_is_the_robots_own(unit: dict[str, list[str]]) -> None:
    """Two robots of one template must share no directory: each is named by the unit (%N)."""
    assert unit["RuntimeDirectory"] == unit["StateDirectory"] == unit["LogsDirectory"] == ["%N"]
    for line in unit["ExecStartPre"] + unit["ExecStart"] + unit["ExecStopPost"]:
        for word in line.split()[1:]:
            assert "/" not in word or "/%N" in word, word


@pytest.mark.parametrize("name", ["hobnail.service", "hobnail@.service"])
def test_verify(name: str, analyze: str, tmp_path: Path) -> None:
    """As installed, with programs that are there: the real ones are not on this machine."""
    copy = re.sub(r"/opt/hobnail/bin/[a-z-]+", "/bin/true", (UNITS / name).read_text())
    (tmp_path / name).write_text(copy)
    done = subprocess.run([analyze, "verify", tmp_path / name], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")


def test_security(analyze: str) -> None:
    done = subprocess.run(
        [
            analyze,
            "security",
            "--offline=true",
            f"--threshold={SECURITY_LIMIT * 10:.0f}",
            UNITS / "hobnail.service",
        ],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr


def test_what_could_be_stricter_has_its_reason(analyze: str) -> None:
    """Whatever systemd would have stricter stands in the unit file, with why it is not."""
    report = subprocess.run(
        [analyze, "security", "--offline=true", "--json=short", UNITS / "hobnail.service"],
        capture_output=True,
        text=True,
        check=True,
    )
    text = (UNITS / "hobnail.service").read_text()
    _, _, reasons = text.partition("# What `systemd-analyze security` would have stricter")
    given = {line[1:].split("  ")[1].strip() for line in reasons.splitlines() if line.startswith("#   ")}
    wanted = {item["name"].replace("/", ", ") for item in json.loads(report.stdout) if item["exposure"]}
    assert given == wanted


def test_times_fit_the_programs(unit: dict[str, list[str]]) -> None:
    closing_s = serve.POWER_DOWN_S + 2 * serve.CLOSE_S  # the bus, then the log
    assert seconds(unit, "TimeoutStopSec") > closing_s
    assert seconds(unit, "TimeoutStartSec") > 2 * serve.BUS_WAIT_S
    # The program's own answers to a stalled bus come first.
    assert seconds(unit, "WatchdogSec") > Safety().bus_stall_s * 1.5
    # A bus that never comes ends in the limit: all its starts fit into the interval.
    each_s = serve.BUS_WAIT_S + seconds(unit, "RestartSec") + 5.0
    assert seconds(unit, "StartLimitIntervalSec") > seconds(unit, "StartLimitBurst") * each_s


def test_exit_codes_that_no_restart_mends(unit: dict[str, list[str]]) -> None:
    (codes,) = unit["RestartPreventExitStatus"]
    prevented = {int(code) for code in codes.split()}
    assert prevented == {
        errors.EX_USAGE,
        errors.EX_DATAERR,
        errors.EX_NOINPUT,
        errors.EX_NOPERM,
        errors.EX_CONFIG,
    }
    assert errors.EX_UNAVAILABLE not in prevented  # a bus may come late


def test_realtime_priority_is_allowed(unit: dict[str, list[str]]) -> None:
    assert seconds(unit, "LimitRTPRIO") >= realtime.FIFO_PRIORITY


def test_command_lines_are_understood(unit: dict[str, list[str]], tmp_path: Path) -> None:
    (line,) = unit["ExecStart"]
    program, name, *options = line.split()
    assert program == "/opt/hobnail/bin/hobnail"
    arguments = command(name)[1].parse_args(options)
    assert (name, arguments.driver, arguments.realtime) == ("run", "pca9685", True)

    (line,) = unit["ExecStopPost"]
    program, *options = line.split()
    assert program == "/opt/hobnail/bin/hobnail-release"
    note = tmp_path / "boards"
    note.touch()
    assert release.main([str(note) if "boards" in word else word for word in options]) == release.EX_OK
