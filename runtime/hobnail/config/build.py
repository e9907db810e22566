"""From the sections of a configuration that was found good to the frozen `Robot`; SI units.

Nothing is checked here: `hobnail.config.checks` comes first.
"""

from __future__ import annotations

from typing import Any

from hobnail.config.fields import Section
from hobnail.config.tables import JOINT_NAMES
from hobnail.motion.gaits import BUILT_IN_GAITS, LIFT_SHARE, built_in_gait
from hobnail.robot import (
    Board,
    Body,
    Envelope,
    Gait,
    Joint,
    Keyframe,
    Leg,
    PostureLimits,
    Robot,
    Safety,
    Servo,
    Stance,
    StopInput,
    Supply,
    Vec3,
)


def build_robot(section: Section) -> Robot:
    values = section.values
    servos = {servo.values["name"]: servo for servo in values["servos"]}
    legs = tuple(build_leg(leg, servos) for leg in values["legs"])
    hips = [leg.hip_m for leg in legs]
    height_m = values["stance"].values["height_mm"]
    safety = values.get("safety")
    return Robot(
        **section.arguments(),
        body=Body(**values["body"].arguments()),
        legs=legs,
        boards=tuple(_board(board) for board in values["boards"]),
        gaits=tuple(build_gait(gait, hips, height_m) for gait in values["gaits"]),
        stance=Stance(**values["stance"].arguments()),
        envelope=Envelope(**values["envelope"].arguments()),
        posture_limits=PostureLimits(**values["posture"].arguments()),
        supply=Supply(**values["supply"].arguments()),
        safety=_safety(safety) if safety else Safety(),
    )


def _board(section: Section) -> Board:
    arguments = section.arguments()
    if pin := section.values.get("output_enable"):
        arguments["output_enable"] = (pin.values["chip"], pin.values["line"])
    return Board(**arguments)


def build_leg(section: Section, servos: dict[str, Section]) -> Leg:
    arguments = section.arguments()
    outward = 1.0 if arguments["hip_m"][1] > 0.0 else -1.0
    joints = section.values["joints"].values
    roll, hip, knee = (_joint(f"{arguments['name']}.{name}", joints[name], servos) for name in JOINT_NAMES)
    return Leg(**arguments, abduction_m=outward * section.values["abduction_mm"], joints=(roll, hip, knee))


def _joint(name: str, section: Section, servos: dict[str, Section]) -> Joint:
    servo = servos[section.values["servo"]]
    own = {**servo.values, **section.values}
    return Joint(
        name=name,
        servo=Servo(**servo.arguments()),
        board=own["board"],
        pulse_map=own["pulse_map_deg_us"],
        pulse_limits_us=own["pulse_limits_us"],
        **section.arguments(),
    )


def build_gait(section: Section, hips: list[Vec3], height_m: float) -> Gait:
    arguments: dict[str, Any] = {}
    if section.values["name"] in BUILT_IN_GAITS and "phases" not in section.values:
        pattern = built_in_gait(section.values["name"], hips)
        arguments = {
            "duty": pattern.duty,
            "phases": pattern.phases,
            "body_shift": pattern.body_shift,
            "cycle_range_s": pattern.cycle_range_s(height_m),
            "lift_m": LIFT_SHARE * height_m,
        }
    arguments |= section.arguments()
    if arguments.get("cycle_s") == "auto":
        arguments["cycle_s"] = None
    if "swing" in arguments:
        arguments["swing"] = tuple(Keyframe(**keyframe.arguments()) for keyframe in arguments["swing"])
    return Gait(**arguments)


def _safety(section: Section) -> Safety:
    contact = section.values.get("stop_input")
    return Safety(**section.arguments(), stop_input=StopInput(**contact.arguments()) if contact else None)
