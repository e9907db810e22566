"""Changes to a calibration and their history: a new value, and taking the last one back; SI units.

A change never loses what was there before: the history has the old value, the
new one, when and by whom.  Taking back is a change too, marked so.  Reading and
writing the file is for `hobnail.config.calibration`.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from hobnail.config.calibration import (
    BOARD,
    JOINT,
    WALK,
    WALK_RESPONSE,
    WRITTEN,
    BoardCalibration,
    Calibration,
    Change,
    JointCalibration,
    Measured,
    WalkCalibration,
    apply_calibration,
    given,
    interpret,
    render,
)
from hobnail.config.checks import check_pulse_map
from hobnail.config.fields import Group
from hobnail.config.strict_yaml import Report, parse
from hobnail.errors import CalibrationError, CommandError
from hobnail.robot import Board, Joint, Robot, WalkResponse

UNDO = "undo: "  # before what a change takes back
ATTRIBUTES = {key: attribute for attribute, (key, _) in WRITTEN.items()}


def part_named(robot: Robot, name: str) -> Joint | Board | WalkResponse:
    """The joint or board of that name, or for `WALK` the walk.  Raises KeyError."""
    parts: dict[str, Joint | Board | WalkResponse] = {WALK: robot.walk}
    parts |= {board.name: board for board in robot.boards}
    parts |= {joint.name: joint for joint in robot.joints}
    return parts[name]


def measured_at(calibration: Calibration, name: str, part: Joint | Board | WalkResponse) -> Measured:
    """What the calibration holds for a part; empty when that is nothing."""
    match part:
        case Joint():
            return calibration.joints.get(name, JointCalibration())
        case Board():
            return calibration.boards.get(name, BoardCalibration())
        case WalkResponse():
            return calibration.walk


def changed(
    calibration: Calibration,
    robot: Robot,
    name: str,
    *,
    when: str,
    who: str,
    undo: bool = False,
    **values: Any,
) -> Calibration:
    """The calibration with new values for the joint or board `name`, or the walk, and the history of it.

    `values` are attributes of JointCalibration, BoardCalibration or
    WalkCalibration, None to forget one; `robot` is as configured, so that the
    history can tell the old values.  `when` is an ISO 8601 date and time;
    `undo` marks the change as one that takes another back.  Raises
    CalibrationError when the result would not make a good file, KeyError when
    there is no part of that name.
    """
    before, configured = part_named(apply_calibration(robot, calibration), name), part_named(robot, name)
    measured = replace(measured_at(calibration, name, before), **values)
    joints, boards, walk = dict(calibration.joints), dict(calibration.boards), calibration.walk
    match measured:
        case JointCalibration():
            joints[name] = measured
        case BoardCalibration():
            boards[name] = measured
        case WalkCalibration():
            walk = measured
    changes = tuple(
        Change(
            when=when,
            who=who,
            what=f"{UNDO if undo else ''}{name} {WRITTEN[attribute][0]}",
            old=WRITTEN[attribute][1](getattr(before, attribute)),
            new=WRITTEN[attribute][1](getattr(configured, attribute) if value is None else value),
        )
        for attribute, value in values.items()
    )
    new = replace(
        calibration,
        joints={name: each for name, each in joints.items() if given(each)},
        boards={name: each for name, each in boards.items() if given(each)},
        walk=walk,
        history=calibration.history + changes,
    )
    report = Report(f"{robot.name}.calibration.yaml, as it would be")
    read_back = interpret(render(new).encode(), robot, report)
    if read_back is None:
        raise CalibrationError(report.problems())
    return read_back


def read_values(part: Joint | Board | WalkResponse, text: str, label: str) -> dict[str, Any]:
    """Attributes in SI units from `key: value` lines, as they would stand in the file for that part.

    `label` stands in messages for the file.  Raises CalibrationError.
    """
    fields_of = JOINT if isinstance(part, Joint) else BOARD if isinstance(part, Board) else WALK_RESPONSE
    report = Report(label)
    root = parse(text.encode(), report)
    section = None if root is None else Group(fields_of).read(root, report)
    if section is not None and isinstance(part, Joint):
        check_pulse_map(section, report)
    if section is None or report.problems():
        raise CalibrationError(report.problems())
    return section.arguments()


def standing(history: tuple[Change, ...]) -> list[Change]:
    """The changes that have not been taken back, oldest first."""
    left: list[Change] = []
    for change in history:
        if not change.what.startswith(UNDO):
            left.append(change)
        elif left:
            left.pop()
    return left


def undone(calibration: Calibration, robot: Robot, *, when: str, who: str) -> Calibration:
    """The calibration with the newest change taken back; asked again, the one before it.

    `robot` is as configured.  A value that was the configured one is forgotten,
    so that the configuration stands again.  Raises CommandError when there is
    nothing to take back, CalibrationError when that would not make a good file.
    """
    left = standing(calibration.history)
    if not left:
        raise CommandError("there is nothing to undo: no change is recorded that still stands")
    name, _, key = left[-1].what.rpartition(" ")
    try:
        attribute, part = ATTRIBUTES[key], part_named(robot, name)
    except KeyError:
        raise CommandError(
            f"the last change is to {left[-1].what!r}, which this robot does not have: edit the file by hand"
        ) from None
    values = read_values(part, f"{key}: {left[-1].old}", "the history's old value")
    if left[-1].old == WRITTEN[attribute][1](getattr(part, attribute)):
        values = {attribute: None}
    return changed(calibration, robot, name, when=when, who=who, undo=True, **values)
