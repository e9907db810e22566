"""The calibration file: what was measured on the bench, kept beside the configuration with its history.

`juniper.calibration.yaml` goes before `juniper.yaml`.  Four things are kept
apart: trim (how the horn sits), direction, pulse map (what pulse gives what
angle) and hard pulse limits; and for a board its true clock, for the whole robot
what it truly walks.  SI units inside, degrees, mm and MHz in the file, to 0.0001
degree, 0.001 mm and 0.01 us.  Nothing here measures: that is for `hobnail.workshop`.
"""

from __future__ import annotations

import contextlib
import json
import math
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Any

from hobnail.config.checks import FRAME_SHARE, check_pulse_map
from hobnail.config.fields import Field, Group, Integer, Named, Section, Several, Text, nearest
from hobnail.config.strict_yaml import Mapping as YamlMapping
from hobnail.config.strict_yaml import Node, Report, parse, read_file
from hobnail.config.tables import (
    AHEAD,
    DIRECTION,
    OSCILLATOR,
    PULSE_LIMITS,
    PULSE_MAP,
    SIDEWAYS,
    TRIM,
    TURN,
)
from hobnail.errors import CalibrationError, Problem
from hobnail.robot import Board, Joint, Robot, Span, Vec2, Vec3

VERSION = 1
MAX_CHANGES = 5000
WALK = "the walk"  # the part that is the whole robot; no joint or board can be called so

JOINT = (
    Field("trim_deg", "trim_rad", TRIM, "Measured error of the horn's seat.", required=False),
    Field("direction", "direction", DIRECTION, "-1: the shaft turns against the joint.", required=False),
    Field("pulse_map_deg_us", "pulse_map", PULSE_MAP, "Shaft angle and pulse.", required=False),
    Field("pulse_limits_us", "pulse_limits_us", PULSE_LIMITS, "Pulses never to be left.", required=False),
)
BOARD = (Field("oscillator_mhz", "oscillator_hz", OSCILLATOR, "The chip's true clock.", required=False),)
WALK_RESPONSE = (
    Field("ahead_mm_mm_deg", "ahead", AHEAD, "What a metre ahead by the feet is.", required=False),
    Field("sideways_mm_mm_deg", "sideways", SIDEWAYS, "What a metre to the left is.", required=False),
    Field("turn_deg", "turn", TURN, "What a full turn by the feet is.", required=False),
)
_WHEN = Text(
    r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d(:\d\d)?(Z|[+-]\d\d:\d\d)?",
    'a date and time such as "2026-03-01T14:30:00Z"',
)
_VALUE = Text(r"[ -~]{0,4000}", "a value in quotes")
_CHANGE = (
    Field("when", "when", _WHEN, "Date and time."),
    Field(
        "who", "who", Text(r"[\w .,'@+-]{1,60}", "a name of 1 to 60 letters and digits"), "Who changed it."
    ),
    Field("what", "what", Text(r"[ -~]{1,120}", "what was changed"), "The joint or board, and the key."),
    Field("old", "old", _VALUE, "The value before."),
    Field("new", "new", _VALUE, "The value after."),
)
_FILE = (
    Field("version", "", Integer(VERSION, VERSION), "Version of this file's format."),
    Field("robot", "robot", Text(), "Name of the robot that it was measured on."),
    Field("boards", "", Named(Group(BOARD), "boards"), "By name of the board.", required=False),
    Field("joints", "", Named(Group(JOINT), "joints"), "By name of the joint.", required=False),
    Field(
        "walk",
        "",
        Group(WALK_RESPONSE),
        "By measured walks: ahead, to the left, turned left.",
        required=False,
    ),
    # Required and written last, so that a file cut short is not taken for a whole one.
    Field("history", "", Several(Group(_CHANGE), 0, MAX_CHANGES, "changes"), "Oldest first."),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class JointCalibration:
    """What was measured at one joint; None where the configuration stands.  As in `robot.Joint`."""

    trim_rad: float | None = None
    direction: int | None = None
    pulse_map: tuple[Vec2, ...] | None = None
    pulse_limits_us: Span | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class BoardCalibration:
    """What was measured at one board; None where the configuration stands."""

    oscillator_hz: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class WalkCalibration:
    """What measured walks gave; None where nothing was measured.  As in `robot.WalkResponse`."""

    ahead: Vec3 | None = None
    sideways: Vec3 | None = None
    turn: float | None = None


Measured = JointCalibration | BoardCalibration | WalkCalibration


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """One entry of the history; `old` and `new` as the file shows them."""

    when: str
    who: str
    what: str
    old: str
    new: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Calibration:
    """A calibration file: joints and boards by name, and every change to them, oldest first."""

    robot: str
    joints: Mapping[str, JointCalibration] = field(default_factory=dict)
    boards: Mapping[str, BoardCalibration] = field(default_factory=dict)
    walk: WalkCalibration = field(default_factory=WalkCalibration)
    history: tuple[Change, ...] = ()


def calibration_path(config: str | Path) -> Path:
    """Where the calibration of a configuration file is kept: beside it, `<stem>.calibration.yaml`."""
    config = Path(config)
    return config.with_name(f"{config.stem}.calibration.yaml")


def read_calibration(path: Path, robot: Robot) -> Calibration:
    """The calibration of a robot; an empty one when there is no file.

    Raises CalibrationError with every problem found.
    """
    if not os.path.lexists(path):
        return Calibration(robot=robot.name)
    report = Report(str(path))
    data = read_file(path, report)
    calibration = None if data is None else interpret(data, robot, report)
    if calibration is None:
        raise CalibrationError(report.problems())
    return calibration


def interpret(data: bytes, robot: Robot | None, report: Report) -> Calibration | None:
    """The calibration that a file's bytes hold; None, with the problems told, when there are any.

    Without a robot, only what the file says for itself is checked.
    """
    root = parse(data, report)
    section = None if root is None else Group(_FILE).read(root, report)
    if section is None:
        return None
    joints, boards = section.values.get("joints", {}), section.values.get("boards", {})
    for joint in joints.values():
        check_pulse_map(joint, report)
    if robot is not None:
        _check_names(section, robot, report)
    if report.problems():
        return None
    return Calibration(
        **section.arguments(),
        joints={name: JointCalibration(**joint.arguments()) for name, joint in joints.items()},
        boards={name: BoardCalibration(**board.arguments()) for name, board in boards.items()},
        walk=WalkCalibration(**walk.arguments())
        if (walk := section.values.get("walk"))
        else WalkCalibration(),
        history=tuple(Change(**change.arguments()) for change in section.values.get("history", ())),
    )


def _check_names(section: Section, robot: Robot, report: Report) -> None:
    name = section.values.get("robot")
    if name is not None and name != robot.name:
        hint = "It was measured on another robot: give this one a file of its own."
        report.add(section.at("robot"), name, robot.name, hint)
    boards = {board.name: board for board in robot.boards}
    joints = {joint.name: joint for joint in robot.joints}
    _check_known(section.at("boards"), boards, report)
    _check_known(section.at("joints"), joints, report)
    for name, entry in section.values.get("joints", {}).items():
        limits = entry.values.get("pulse_limits_us")
        if name in joints and limits is not None:
            longest_us = FRAME_SHARE * 1e6 / boards[joints[name].board].frame_hz
            if limits[1] > longest_us:
                allowed = f"at most {longest_us:g} us, in the frame of board {joints[name].board}"
                report.add(entry.at("pulse_limits_us"), f"{limits[1]:g} us", allowed)


def _check_known(node: Node, known: Mapping[str, Joint | Board], report: Report) -> None:
    if not isinstance(node, YamlMapping) or not node.path:  # no path: the section is not there at all
        return
    for name, key in node.keys.items():
        if name not in known and not report.full:
            report.add(key, f"unknown name {name[:40]!r}", ", ".join(known), nearest(name, known))


def apply_calibration(robot: Robot, calibration: Calibration) -> Robot:
    """The robot with what was measured in place of what was configured."""

    def measured(joint: Joint) -> Joint:
        return replace(joint, **given(calibration.joints.get(joint.name)))

    legs = []
    for leg in robot.legs:
        roll, hip, knee = leg.joints
        legs.append(replace(leg, joints=(measured(roll), measured(hip), measured(knee))))
    boards = (replace(board, **given(calibration.boards.get(board.name))) for board in robot.boards)
    walk = replace(robot.walk, **given(calibration.walk))
    return replace(robot, legs=tuple(legs), boards=tuple(boards), walk=walk)


def given(measured: Measured | None) -> dict[str, Any]:
    """Attribute -> value of what was measured."""
    if measured is None:
        return {}
    values = {each.name: getattr(measured, each.name) for each in fields(measured)}
    return {name: value for name, value in values.items() if value is not None}


def _number(value: float, decimals: int = 4) -> str:
    """Decimal notation without exponent or trailing zeros."""
    text = f"{value:.{decimals}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text == "-0" else text


def _pairs(points: tuple[Vec2, ...]) -> str:
    pairs = (f"[{_number(math.degrees(shaft))}, {_number(pulse, 2)}]" for shaft, pulse in points)
    return f"[{', '.join(pairs)}]"


def _true_metre(value: Vec3) -> str:
    ahead, left, turned = value
    return f"[{_number(1000 * ahead, 3)}, {_number(1000 * left, 3)}, {_number(math.degrees(turned))}]"


# Attribute -> its key in the file, and how a value of it is written there.
WRITTEN: dict[str, tuple[str, Callable[[Any], str]]] = {
    "trim_rad": ("trim_deg", lambda value: _number(math.degrees(value))),
    "direction": ("direction", str),
    "pulse_map": ("pulse_map_deg_us", _pairs),
    "pulse_limits_us": ("pulse_limits_us", lambda value: f"[{_number(value[0], 2)}, {_number(value[1], 2)}]"),
    "oscillator_hz": ("oscillator_mhz", lambda value: _number(value / 1e6, 6)),
    "ahead": ("ahead_mm_mm_deg", _true_metre),
    "sideways": ("sideways_mm_mm_deg", _true_metre),
    "turn": ("turn_deg", lambda value: _number(360.0 * value)),
}


def _written(measured: Measured) -> str:
    values = (f"{WRITTEN[key][0]}: {WRITTEN[key][1](value)}" for key, value in given(measured).items())
    return f"{{{', '.join(values)}}}"


def render(calibration: Calibration) -> str:
    """The text of the calibration file; reading it gives the same calibration."""
    lines = [
        f"# {calibration.robot}: what was measured on the bench; goes before the configuration.",
        "# May be edited by hand: edit, `hobnail check`, restart.  When hobnail writes it, it keeps",
        "# no comments but these.",
        f"version: {VERSION}",
        f'robot: "{calibration.robot}"',
    ]
    parts: tuple[tuple[str, Mapping[str, JointCalibration | BoardCalibration]], ...] = (
        ("boards", calibration.boards),
        ("joints", calibration.joints),
    )
    for title, measured in parts:
        if measured:
            lines.append(f"{title}:")
        lines += [f"  {name}: {_written(values)}" for name, values in measured.items()]
    if given(calibration.walk):
        lines.append(f"walk: {_written(calibration.walk)}")
    lines.append("history:" if calibration.history else "history: []")
    for change in calibration.history:
        entries = (
            f"{each.name}: {json.dumps(getattr(change, each.name), ensure_ascii=False)}"
            for each in fields(change)
        )
        lines.append(f"  - {{{', '.join(entries)}}}")
    return "\n".join(lines) + "\n"


def write_calibration(path: Path, calibration: Calibration) -> None:
    """Replace the calibration file as a whole: after a crash at any instant it is the old or the new one.

    Raises CalibrationError when that cannot be done, and says which of the two it is.
    """
    import tempfile  # slow to import, and loading a robot does without

    path = Path(os.path.realpath(path))
    temporary, outcome = "", "The file is as it was."
    try:
        before = path.stat() if path.exists() else None
        descriptor, temporary = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".tmp", dir=path.parent)
        with open(descriptor, "w", encoding="utf-8", newline="\n") as file:
            file.write(render(calibration))
            file.flush()
            os.fchmod(file.fileno(), before.st_mode & 0o777 if before else 0o644)
            if before and os.geteuid() == 0:
                os.fchown(file.fileno(), before.st_uid, before.st_gid)  # the service must still read it
            os.fsync(file.fileno())
        os.replace(temporary, path)
        temporary, outcome = "", "The new file is there, but might not outlive a power cut."
        _sync_folder(path.parent)
    except OSError as error:
        found = error.strerror or str(error)
        raise CalibrationError(
            [Problem(str(path), 0, 0, "", found, "a place to write to", outcome)]
        ) from error
    finally:
        if temporary:
            with contextlib.suppress(OSError):
                os.unlink(temporary)


def _sync_folder(folder: Path) -> None:
    """Make a rename in a folder survive a power cut."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
