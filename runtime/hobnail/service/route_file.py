"""Route files: strict YAML in mm, degrees, s and per cent -> steps in SI units, and steps <-> JSON.

A file is a mapping with one key, `steps`; a step is a mapping with exactly one
action and, if wanted, a `note`.  The same steps, as JSON, are what the request
`route` takes on the socket.  Does not walk them: `hobnail.service.route`.
`python -m hobnail.service.route_file > config/routes/hobnail-route.schema.json`
publishes the JSON Schema for editors.
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from pathlib import Path

from hobnail.config.fields import Field, Group, Number, Section, Several, Text
from hobnail.config.strict_yaml import Listing, Mapping, Node, Report, Scalar, parse, read_file
from hobnail.errors import CommandError, RouteError
from hobnail.robot import Robot
from hobnail.service.route_steps import ChangeGait, Move, Pose, Speed, Step, Wait, misfits

MAX_STEPS = 1000
_DEPTH = 4  # steps, step, posture, lean
_SHOWN = 60  # characters of a key, digits of a number: what a message can show
_LENGTH = Number(-20000, 20000, "mm")
_TURN = Number(-3600, 3600, "deg")

ARC = (
    Field("radius_mm", "", Number(10, 20000, "mm"), "Radius of the body origin's path."),
    Field("turn_deg", "", _TURN, "How far the robot turns on it; positive is to the left."),
)

POSTURE = (
    Field("height_mm", "height_m", Number(10, 2000, "mm"), "Hip roll axes above the ground.", required=False),
    Field("roll_deg", "roll_rad", Number(-45, 45, "deg"), "Positive lifts the left side.", required=False),
    Field("pitch_deg", "pitch_rad", Number(-45, 45, "deg"), "Positive lowers the front.", required=False),
    Field("yaw_deg", "yaw_rad", Number(-60, 60, "deg"), "Positive turns the body left.", required=False),
    Field(
        "lean_mm",
        "lean_m",
        Several(Number(-300, 300, "mm"), 2, 2, "forward, left"),
        "Shift over the feet.",
        required=False,
    ),
)

ACTIONS = (
    Field("forward_mm", "", _LENGTH, "Walk straight ahead; negative is back.", required=False),
    Field("sideways_mm", "", _LENGTH, "Walk sideways; positive is to the left.", required=False),
    Field("turn_deg", "", _TURN, "Turn on the spot; positive is to the left.", required=False),
    Field("arc", "", Group(ARC), "Walk ahead along an arc.", required=False),
    Field("wait_s", "", Number(0, 3600, "s"), "Stand still.", required=False),
    Field("posture", "", Group(POSTURE), "Stand differently; what is left out stays.", required=False),
    Field("gait", "", Text(), "Walk on with another of the robot's gaits.", required=False),
    Field(
        "speed_percent",
        "",
        Number(5, 100, "%"),
        "Share of the certified envelope from here on.",
        required=False,
    ),
)

STEP = (
    *ACTIONS,
    Field(
        "note",
        "",
        Text(r"[^\x00-\x1f\x7f-\x9f]{1,60}", "text of 1 to 60 characters"),
        "Shown while the step is walked.",
        required=False,
    ),
)

ROUTE = Group((Field("steps", "", Several(Group(STEP), 1, MAX_STEPS, "steps"), "What to do, in order."),))


def load_route(path: str | Path, robot: Robot | None = None) -> tuple[Step, ...]:
    """The steps of a route file; with a robot, checked against its gaits and posture limits too.

    Raises RouteError with every problem found.
    """
    path = Path(path)
    report = Report(str(path))
    data = read_file(path, report)
    root = parse(data, report) if data is not None else None
    steps = _read(root, report, robot) if root is not None else []
    if report.problems():
        raise RouteError(report.problems())
    return tuple(steps)


def steps_from_json(value: object, robot: Robot | None = None) -> tuple[Step, ...]:
    """The steps of a `route` request: the list that stands under `steps` in a file.

    Raises CommandError with every problem found.
    """
    if not isinstance(value, list):
        raise CommandError("steps is no list: give a list of steps, as in a route file")
    report = Report("route")
    root = Mapping(path="", line=0, column=0, entries={"steps": _node(value, "steps", 0)})
    steps = _read(root, report, robot)
    problems = report.problems()
    if problems:
        raise CommandError("; ".join(str(problem) for problem in problems))
    return tuple(steps)


def steps_to_json(steps: Sequence[Step]) -> list[dict[str, object]]:
    """What `steps_from_json` reads."""
    return [{**_action(step), **({"note": step.note} if step.note else {})} for step in steps]


def schema_text() -> str:
    """The JSON Schema, draft 2020-12, of a route file, as published."""
    schema = ROUTE.schema()
    steps = schema["properties"]["steps"]
    steps["items"]["oneOf"] = [{"required": [action.key]} for action in ACTIONS]
    steps["items"]["properties"]["posture"]["minProperties"] = 1
    head = {"$schema": "https://json-schema.org/draft/2020-12/schema", "title": "hobnail route"}
    return json.dumps({**head, **schema}, indent=1) + "\n"


def _read(root: Mapping, report: Report, robot: Robot | None) -> list[Step]:
    route = ROUTE.read(root, report)
    if route is None or "steps" not in route.values:
        return []
    steps = []
    for section in route.values["steps"]:
        step = _step(section, report)
        if step is None:
            continue
        steps.append(step)
        if robot is not None:
            for part, (found, allowed) in misfits(step, robot):
                report.add(_where(section, part), found, f"{allowed}, for {robot.name}")
    return steps


def _step(section: Section, report: Report) -> Step | None:
    """The step that a section describes; None, with the problem told, when it is none."""
    names = [field.key for field in ACTIONS]
    written = [name for name in names if name in section.node.entries]
    if not written and any(name not in section.values for name in section.node.entries):
        return None  # an unknown key was told already, and is most likely the action misspelt
    if len(written) != 1:
        found = " and ".join(written) if written else "no action"
        report.add(
            section.node, found, f"exactly one of {', '.join(names)}", "Make a step of its own of each."
        )
        return None
    action = written[0]
    value = section.values.get(action)
    if value is None:  # told already
        return None
    note = section.values.get("note", "")
    match action:
        case "forward_mm":
            return Move(twist=(value, 0.0, 0.0), note=note)
        case "sideways_mm":
            return Move(twist=(0.0, value, 0.0), note=note)
        case "turn_deg":
            return Move(twist=(0.0, 0.0, value), note=note)
        case "arc":
            if len(value.values) < len(ARC):
                return None
            radius_m, turn_rad = value.values["radius_mm"], value.values["turn_deg"]
            return Move(twist=(radius_m * abs(turn_rad), 0.0, turn_rad), note=note)
        case "wait_s":
            return Wait(duration_s=value, note=note)
        case "posture":
            if not value.node.entries:
                report.add(value.node, "an empty mapping", Group(POSTURE).allowed())
            return Pose(**value.arguments(), note=note)
        case "gait":
            return ChangeGait(name=value, note=note)
        case _:
            return Speed(share=value / 100.0, note=note)


def _where(section: Section, part: str) -> Node:
    """The node of a part of a step, by the attribute that it became."""
    for key in ("gait", "posture"):
        if key in section.values:
            value = section.values[key]
            if isinstance(value, Section):
                for field in value.fields:
                    if field.becomes == part:
                        return value.at(field.key)
            return section.at(key)
    return section.node


def _action(step: Step) -> dict[str, object]:
    match step:
        case Move(twist=(x, y, yaw)):
            if yaw and x:
                return {"arc": {"radius_mm": _millimetres(x / abs(yaw)), "turn_deg": _degrees(yaw)}}
            if yaw:
                return {"turn_deg": _degrees(yaw)}
            return {"sideways_mm": _millimetres(y)} if y else {"forward_mm": _millimetres(x)}
        case Wait():
            return {"wait_s": step.duration_s}
        case Pose():
            posture: dict[str, object] = {}
            if step.height_m is not None:
                posture["height_mm"] = _millimetres(step.height_m)
            for name, angle in (("roll", step.roll_rad), ("pitch", step.pitch_rad), ("yaw", step.yaw_rad)):
                if angle is not None:
                    posture[f"{name}_deg"] = _degrees(angle)
            if step.lean_m is not None:
                posture["lean_mm"] = [_millimetres(length) for length in step.lean_m]
            return {"posture": posture}
        case ChangeGait():
            return {"gait": step.name}
        case Speed():
            return {"speed_percent": round(step.share * 100.0, 6)}


def _millimetres(length_m: float) -> float:
    return round(length_m * 1000.0, 6)


def _degrees(angle_rad: float) -> float:
    return round(math.degrees(angle_rad), 6)


def _node(value: object, path: str, depth: int) -> Node:
    """A JSON value as a node, so that file and socket are judged by the same rules."""
    if isinstance(value, list) and depth < _DEPTH:
        items = [_node(item, f"{path}[{k}]", depth + 1) for k, item in enumerate(value)]
        return Listing(path=path, line=0, column=0, items=items)
    if isinstance(value, dict) and depth < _DEPTH:
        mapping = Mapping(path=path, line=0, column=0)
        for name, entry in value.items():
            key = str(name)[:_SHOWN]
            below = f"{path}.{key}"
            mapping.keys[key] = Scalar(path=below, line=0, column=0, text=key, plain=True)
            mapping.entries[key] = _node(entry, below, depth + 1)
        return mapping
    if isinstance(value, float) and math.isfinite(value):
        text = repr(value)
        if "e" in text:
            text = f"{value:.30f}"  # the rules of the file know no exponents
    elif isinstance(value, int) and abs(value) > 10**_SHOWN:
        text = "a huge number"  # printing it could take long, or be refused
    elif isinstance(value, list | dict):
        text = "something nested too deep"
    else:
        text = str(value)
    return Scalar(path=path, line=0, column=0, text=text, plain=not isinstance(value, str))


if __name__ == "__main__":
    print(schema_text(), end="")
