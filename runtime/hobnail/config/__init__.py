"""A robot's configuration: YAML file -> frozen `Robot` in SI units, or every problem in it at once.

The calibration file beside it, if there is one, is laid over it.  The keys and
their bounds are in `hobnail.config.tables`; nothing here computes a motion.
"""

from __future__ import annotations

import hashlib
import os
from dataclasses import replace
from pathlib import Path

from hobnail.config.build import build_robot
from hobnail.config.calibration import apply_calibration, calibration_path, interpret
from hobnail.config.checks import check_robot
from hobnail.config.fields import Group, Section
from hobnail.config.reach import check_balanced_reach, check_reach
from hobnail.config.strict_yaml import Listing, Mapping, Report, parse, read_file
from hobnail.config.tables import LEG_DEFAULTS, ROBOT
from hobnail.errors import CalibrationError, ConfigError
from hobnail.robot import Robot


def load_robot(path: str | Path, *, calibrated: bool = True) -> Robot:
    """The robot that the file describes, with its calibration if that is beside it.

    Not `calibrated`: as configured, whatever is beside it.

    Raises ConfigError with all problems of both files; CalibrationError when
    only the calibration has any.
    """
    path = Path(path)
    report = Report(str(path))
    data = read_file(path, report)
    section = _read(data, report) if data is not None else None
    robot = build_robot(section) if section is not None and not report.problems() else None

    beside = calibration_path(path)
    beside_report = Report(str(beside))
    present = calibrated and os.path.lexists(beside)
    measured = read_file(beside, beside_report) if present else None
    calibration = interpret(measured, robot, beside_report) if measured is not None else None
    if robot is not None and calibration is not None:
        robot = apply_calibration(robot, calibration)

    if section is not None and robot is not None and not beside_report.problems():
        check_balanced_reach(section, robot, report)
    if problems := report.problems():
        raise ConfigError(problems + beside_report.problems())
    if problems := beside_report.problems():
        raise CalibrationError(problems)
    assert robot is not None
    assert data is not None
    return replace(robot, source=str(path), digest=_digest(data, measured))


def digest_on_disk(path: str | Path) -> str:
    """What `Robot.digest` would be of the two files as they are now; empty when they cannot be read."""
    path, beside = Path(path), calibration_path(path)
    report = Report(str(path))
    data = read_file(path, report)
    measured = read_file(beside, report) if os.path.lexists(beside) else None
    return "" if data is None or report.problems() else _digest(data, measured)


def _digest(data: bytes, measured: bytes | None) -> str:
    return hashlib.sha256(data + (measured or b"")).hexdigest()


def _read(data: bytes, report: Report) -> Section | None:
    """The sections of the file, checked; there may be problems."""
    root = parse(data, report)
    if root is None:
        return None
    _lay_over_defaults(root)
    section = Group(ROBOT).read(root, report)
    if section is not None:
        check_robot(section, report)
        check_reach(section, report)
    return section


def _lay_over_defaults(root: Mapping) -> None:
    defaults, legs = root.entries.get(LEG_DEFAULTS), root.entries.get("legs")
    if isinstance(defaults, Mapping) and isinstance(legs, Listing):
        legs.items = [defaults.overlaid(leg) if isinstance(leg, Mapping) else leg for leg in legs.items]
