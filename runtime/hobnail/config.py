"""A robot's configuration: YAML file -> frozen `Robot` in SI units, or every problem in it at once.

The calibration file beside it, if there is one, is laid over it.  The keys and
their bounds are in `hobnail.config_tables`; nothing here computes a motion.
"""

from __future__ import annotations

import hashlib
from dataclasses import replace
from pathlib import Path

from hobnail.config_build import build_robot
from hobnail.config_checks import check_robot
from hobnail.config_fields import Group
from hobnail.config_tables import ROBOT
from hobnail.config_yaml import Listing, Mapping, Report, parse, read_file
from hobnail.errors import ConfigError
from hobnail.robot import Robot


def load_robot(path: str | Path) -> Robot:
    """The robot that the file describes, with its calibration if that is beside it.

    Raises ConfigError with all problems of both files; CalibrationError when
    only the calibration has any.
    """
    path = Path(path)
    report = Report(str(path))
    data = read_file(path, report)
    root = parse(data, report) if data is not None else None
    robot = _read(root, report) if root is not None else None
    if robot is None or data is None:
        raise ConfigError(report.problems())
    return replace(robot, source=str(path), digest=hashlib.sha256(data).hexdigest())


def _read(root: Mapping, report: Report) -> Robot | None:
    """The robot in SI units; None, with the problems told, when there are any."""
    _lay_over_defaults(root)
    section = Group(ROBOT).read(root, report)
    if section is not None:
        check_robot(section, report)
    return None if section is None or report.problems() else build_robot(section)


def _lay_over_defaults(root: Mapping) -> None:
    defaults, legs = root.entries.get("leg_defaults"), root.entries.get("legs")
    if isinstance(defaults, Mapping) and isinstance(legs, Listing):
        legs.items = [defaults.overlaid(leg) if isinstance(leg, Mapping) else leg for leg in legs.items]
