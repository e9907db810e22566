"""A user's own command file: strict YAML in mm, degrees and s -> a scenario in SI units.

    duration_s: 8              # how long the rehearsal lasts
    start: standing            # or lying; may be left out
    commands:                  # in the order of time; each has at_s and one action
      - {at_s: 0.5, walk: {forward_mm_s: 150, turn_deg_s: 20}}
      - {at_s: 3, gait: crawl}
      - {at_s: 6, request: stand}

Actions: `walk` {forward_mm_s, sideways_mm_s, turn_deg_s, pivot_mm: [x, y]},
`posture` (as in routes), `gait`, `request` (stand, rest, off or reset) and
`stop_category` (0 or 1).  Does not run it.
"""

from __future__ import annotations

from pathlib import Path

from hobnail.config.fields import Choice, Field, Group, Number, Section, Several, Text
from hobnail.config.strict_yaml import Report, parse, read_file
from hobnail.errors import ConfigError
from hobnail.robot import Robot
from hobnail.service.route_file import POSTURE
from hobnail.service.route_steps import Pose, misfits
from hobnail.workshop.rehearse import scenarios
from hobnail.workshop.rehearse.scenarios import Command, Scenario

MAX_COMMANDS = 1000
LONGEST_S = 600.0

WALK = (
    Field(
        "forward_mm_s", "", Number(-5000, 5000, "mm/s"), "Straight ahead; negative is back.", required=False
    ),
    Field(
        "sideways_mm_s", "", Number(-5000, 5000, "mm/s"), "Sideways; positive is to the left.", required=False
    ),
    Field("turn_deg_s", "", Number(-720, 720, "deg/s"), "Turning; positive is to the left.", required=False),
    Field(
        "pivot_mm",
        "",
        Several(Number(-20000, 20000, "mm"), 2, 2, "forward, left"),
        "The point that the velocities are given at.",
        required=False,
    ),
)
_REQUESTS = {name: name for name in ("stand", "rest", "off", "reset")}
ACTIONS = (
    Field("walk", "", Group(WALK), "Walk with a velocity until the next command.", required=False),
    Field("posture", "", Group(POSTURE), "Stand differently; what is left out stays.", required=False),
    Field("gait", "", Text(), "Go on with another of the robot's gaits.", required=False),
    Field("request", "", Choice(_REQUESTS), "Any other request.", required=False),
    Field("stop_category", "", Choice({"0": 0, "1": 1}), "Emergency stop.", required=False),
)
COMMAND = (Field("at_s", "", Number(0, LONGEST_S, "s"), "When, from the start."), *ACTIONS)
SCRIPT = Group(
    (
        Field("duration_s", "", Number(0.1, LONGEST_S, "s"), "How long the rehearsal lasts."),
        Field(
            "start",
            "",
            Choice({"standing": False, "lying": True}),
            "How the robot starts.",
            required=False,
        ),
        Field(
            "commands", "", Several(Group(COMMAND), 1, MAX_COMMANDS, "commands"), "What is asked, and when."
        ),
    )
)


def load_script(path: str | Path, robot: Robot) -> Scenario:
    """The scenario of a command file, checked against the robot.

    Raises ConfigError with every problem found.
    """
    path = Path(path)
    report = Report(str(path))
    data = read_file(path, report)
    root = parse(data, report) if data is not None else None
    section = SCRIPT.read(root, report) if root is not None else None
    commands: list[Command] = []
    if section is not None:
        for entry in section.values.get("commands", ()):
            command = _command(entry, robot, report)
            if command is not None:
                if commands and command.at_s < commands[-1].at_s:
                    report.add(
                        entry.at("at_s"),
                        f"{command.at_s:g} s after {commands[-1].at_s:g} s",
                        "ascending times",
                    )
                commands.append(command)
    if report.problems():
        raise ConfigError(report.problems())
    assert section is not None
    return Scenario(
        name=path.stem,
        about=f"commands of {path.name}",
        commands=tuple(commands),
        duration_s=section.values["duration_s"],
        lying=section.values.get("start", False),
    )


def _command(entry: Section, robot: Robot, report: Report) -> Command | None:
    names = [field.key for field in ACTIONS]
    written = [name for name in names if name in entry.node.entries]
    if len(written) != 1:
        found = " and ".join(written) if written else "no action"
        report.add(
            entry.node, found, f"exactly one of {', '.join(names)}", "Make a command of its own of each."
        )
        return None
    action = written[0]
    at_s, value = entry.values.get("at_s"), entry.values.get(action)
    if at_s is None or value is None:  # told already
        return None
    match action:
        case "walk":
            given = value.values
            return scenarios.walk(
                at_s,
                given.get("forward_mm_s", 0.0),
                given.get("sideways_mm_s", 0.0),
                given.get("turn_deg_s", 0.0),
                given.get("pivot_mm", (0.0, 0.0)),
            )
        case "posture":
            posture = value.arguments()
            for _, (found, allowed) in misfits(Pose(**posture), robot):
                report.add(value.node, found, f"{allowed}, for {robot.name}")
            return scenarios.pose(at_s, **posture)
        case "gait":
            known = [gait.name for gait in robot.gaits]
            if value not in known:
                report.add(entry.at("gait"), value, f"{', '.join(known)}, for {robot.name}")
            return scenarios.change_gait(at_s, value)
        case "stop_category":
            return scenarios.stop(at_s, value)
        case _:
            return Command(at_s=at_s, method=value, twist=scenarios.STILL)
