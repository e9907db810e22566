"""`hobnail check`: tells every problem of a configuration, and what the robot can do if there is none."""

from __future__ import annotations

import math
import sys
from argparse import Namespace
from dataclasses import asdict
from typing import TYPE_CHECKING

from hobnail.cli.options import Parser, add_json, print_json
from hobnail.errors import ConfigError
from hobnail.response import AS_MADE

if TYPE_CHECKING:
    from hobnail.robot import Robot
    from hobnail.workshop.check import Check


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument("config", metavar="CONFIG", help="the robot, such as config/juniper.yaml")
    parser.add_argument("--quick", action="store_true", help="only read the files; do not walk the envelope")
    add_json(parser)
    parser.example("hobnail check config/juniper.yaml", "hobnail check --json my-robot.yaml | jq .gaits")
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Walks every gait over the border of the envelope with the real controller: reach, servo speed,\n"
        "static balance. Of friction, torque and pushes it knows nothing: `hobnail rehearse` does.\n"
        "Exit codes: 0 the configuration can be used; 78 it cannot."
    )


def run(arguments: Namespace) -> int:
    """Print what was found."""
    from hobnail.config import load_robot

    try:
        robot = load_robot(arguments.config)
    except ConfigError as error:
        if arguments.json:
            print_json({"ok": False, "problems": [asdict(problem) for problem in error.problems]})
            return error.exit_code
        print(f"hobnail: {arguments.config}: {len(error.problems)} to mend", file=sys.stderr)
        raise
    if arguments.quick:
        if arguments.json:
            print_json({"ok": True, "problems": [], "robot": robot.name, "digest": robot.digest})
        else:
            print(f"{robot.name}: {robot.source} can be used")
        return 0
    from hobnail.workshop.check import check

    found = check(robot)
    if arguments.json:
        print_json(as_json(found))
    else:
        print("\n".join(lines(found)))
    return 0


def as_json(found: Check) -> dict[str, object]:
    """What was found, in SI units."""
    robot = found.robot
    return {
        "ok": True,
        "problems": [],
        "robot": robot.name,
        "digest": robot.digest,
        "mass_kg": robot.mass_kg,
        "standing_margin_m": found.standing_margin_m,
        "com_m": found.com_m,
        "warnings": found.warnings,
        "gaits": [
            {
                "name": gait.name,
                "forward_m_s": gait.forward_m_s,
                "sideways_m_s": gait.sideways_m_s,
                "turn_rad_s": gait.turn_rad_s,
                "share": gait.share,
                "joint_speed": gait.joint_speed,
                "margin_m": gait.margin_m,
                "walks": [asdict(walk) for walk in gait.walks],
            }
            for gait in found.gaits
        ],
    }


def lines(found: Check) -> list[str]:
    """What was found, for people."""
    robot = found.robot
    envelope, stance = robot.envelope, robot.stance
    told = [
        f"{robot.name}: {robot.source} can be used",
        f"  robot     {len(robot.legs)} legs, {len(robot.joints)} servos on {len(robot.boards)} board(s), "
        f"{robot.mass_kg:.2f} kg, {robot.period_s * 1000:g} ms a tick",
        f"  standing  {stance.height_m * 1000:.0f} mm high, centre of mass {found.com_m[0] * 1000:+.0f} mm "
        f"ahead, {found.standing_margin_m * 1000:.0f} mm inside the feet",
        f"  envelope  {envelope.forward_m_s:g} m/s ahead, {envelope.sideways_m_s:g} m/s sideways, "
        f"{math.degrees(envelope.turn_rad_s):.1f} deg/s",
        *trimmed(robot),
        "",
        "  gait        ahead  sideways     turn   of the    fastest    least",
        "                m/s       m/s    deg/s  envelope    joint   margin",
    ]
    told += [
        f"  {gait.name:<9} {gait.forward_m_s:>7.3f} {gait.sideways_m_s:>9.3f} "
        f"{math.degrees(gait.turn_rad_s):>8.1f}  {gait.share:>7.0%}  "
        f"{gait.joint_speed:>7.0%}  {gait.margin_m * 1000:>4.0f} mm"
        for gait in found.gaits
    ]
    told += [
        "",
        "  of the envelope: least share of a command on its border that was reached",
        "  fastest joint: share of the speed that a servo may be asked for",
        "  least margin: zero-moment point inside the feet on the ground; two feet are a line, with none",
    ]
    return told + [f"warning: {warning}" for warning in found.warnings]


def trimmed(robot: Robot) -> list[str]:
    """What measured walks say that the speeds of the feet truly are; nothing where there were none."""
    if robot.walk == AS_MADE:
        return []
    from hobnail.workshop.trim import in_words

    told = ["speeds here are those of the feet; by measured walks they are truly:", *in_words(robot.walk)]
    return [f"  {'trimmed' if number == 0 else '':<9} {line}" for number, line in enumerate(told)]
