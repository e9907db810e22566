"""`hobnail trim`: makes the robot walk as it is told, from a walk measured with a tape; mm, degrees."""

from __future__ import annotations

import math
import sys
from argparse import Namespace
from typing import TYPE_CHECKING

from hobnail.cli.calibrate import login, told_of_file
from hobnail.cli.options import Parser, add_json, add_socket, number, print_json
from hobnail.errors import EX_USAGE, CommandError

if TYPE_CHECKING:
    from hobnail.workshop.calibrate.ledger import Ledger

KINDS = ("ahead", "sideways", "turn")


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument("config", metavar="CONFIG", help="the robot, such as config/juniper.yaml")
    walk = parser.add_argument_group("the walk, by the robot's own odometry (without one: it is asked for)")
    walk.add_argument(
        "--ahead",
        metavar="MM",
        type=number("--ahead", "mm", -100000, 100000),
        help="it walked so far straight ahead (negative: back)",
    )
    walk.add_argument(
        "--sideways",
        metavar="MM",
        type=number("--sideways", "mm", -100000, 100000),
        help="it walked so far straight to the left (negative: right)",
    )
    walk.add_argument(
        "--turn",
        metavar="DEG",
        type=number("--turn", "deg", -7200, 7200),
        help="it turned so far to the left on the spot (negative: right)",
    )
    walk.add_argument(
        "--walk",
        action="store_true",
        help="let the running robot walk it now, on its feet and with room, at half of its envelope",
    )
    parser.add_argument(
        "--measured",
        metavar="NUMBER",
        nargs="+",
        type=number("--measured", "mm or degrees", -100000, 100000),
        help="what the tape says: mm ahead, mm left, degrees turned left; of a --turn, the degrees only",
    )
    parser.add_argument("--who", metavar="NAME", help="who measures, for the record (default: the login)")
    parser.add_argument("--show", action="store_true", help="print what is in use, and when it was measured")
    parser.add_argument("--reset", action="store_true", help="forget the measured walks")
    add_json(parser, "print the walk's response and its record as JSON, in the units of the file")
    add_socket(parser)
    parser.example(
        "hobnail trim my-robot.yaml --ahead 2000 --measured 1880 50 -3",
        "hobnail trim my-robot.yaml --sideways 1000 --measured 20 930 4",
        "hobnail trim my-robot.yaml --turn 720 --measured 693",
        "hobnail trim my-robot.yaml --ahead 2000 --walk      walks, then asks",
    )
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Calibrate the joints first. One walk of each kind is enough: straight ahead, straight sideways, a\n"
        "turn on the spot; at least 500 mm, or 90 degrees. A second walk of a kind improves on what is in\n"
        "use: start the service again before it. Commands and odometry then mean the true motion; what a\n"
        "metre and a turn truly are is kept, dated, in <robot>.calibration.yaml.\n"
        "Exit codes: 0 kept; 64 not plausible, or wrong usage; 65 the answers ended early; 69 no service;\n"
        "75 the robot does not stand; 78 a file cannot be used."
    )


def run(arguments: Namespace) -> int:
    """Measure, or do what was asked instead."""
    problem = _misuse(arguments)
    if problem:
        print(f"hobnail: {problem}; see `hobnail trim --help`", file=sys.stderr)
        return EX_USAGE
    from hobnail.cli.measured_walk import measured_walk
    from hobnail.config import load_robot
    from hobnail.config.calibration import WALK
    from hobnail.workshop.calibrate.ledger import Ledger
    from hobnail.workshop.trim import improved

    configured = load_robot(arguments.config, calibrated=False)
    ledger = Ledger(arguments.config, configured, arguments.who or login())
    if arguments.show:
        return _report(ledger, arguments)
    ledger.check_writable()
    if arguments.reset:
        given = [entry.key for entry in ledger.entries() if entry.part == WALK]
        if not given:
            raise CommandError(f"there is nothing to reset: {ledger.path} holds no measured walk")
        ledger.forget(WALK)
        return _report(ledger, arguments)
    response = ledger.robot.walk
    walk = measured_walk(arguments, ledger.robot)
    found = improved(response, walk)
    value = {"ahead": found.ahead, "sideways": found.sideways, "turn": found.turn}[walk.kind]
    ledger.keep(WALK, {walk.kind: value})
    return _report(ledger, arguments)


def _misuse(arguments: Namespace) -> str:
    """What does not go together; empty when all does."""
    given = [kind for kind in KINDS if getattr(arguments, kind) is not None]
    if len(given) > 1:
        return f"--{given[0]} and --{given[1]} are two walks: measure one after the other"
    if arguments.show and arguments.reset:
        return "--show and --reset do not go together: give one"
    if (arguments.show or arguments.reset) and (given or arguments.walk or arguments.measured):
        return "--show and --reset stand alone"
    if (arguments.walk or arguments.measured) and not given:
        return "give what was walked: --ahead MM, --sideways MM or --turn DEG"
    if arguments.measured and arguments.walk:
        return "--walk asks for what was measured: leave --measured out"
    wanted = 1 if given == ["turn"] else 3
    if arguments.measured and len(arguments.measured) != wanted:
        what = "one number, the degrees" if wanted == 1 else "three numbers: mm ahead, mm left, degrees"
        return f"--measured has {len(arguments.measured)} number(s); allowed with --{given[0]}: {what}"
    return ""


def _report(ledger: Ledger, arguments: Namespace) -> int:
    """Print what is in use now, and what comes next."""
    from hobnail.cli.calibration_report import dated
    from hobnail.config.calibration import WALK, WRITTEN
    from hobnail.workshop.trim import in_words

    response = ledger.robot.walk
    entries = [entry for entry in ledger.entries() if entry.part == WALK]
    if arguments.json:
        told: dict[str, object] = {"robot": ledger.configured.name, "file": str(ledger.path)}
        for key, (x, y, yaw) in (("ahead", response.ahead), ("sideways", response.sideways)):
            told[f"{key}_mm_mm_deg"] = [round(1000 * x, 3), round(1000 * y, 3), round(math.degrees(yaw), 4)]
        told["turn_deg"] = round(360 * response.turn, 4)
        told["measured"] = {entry.key: {"when": entry.when, "who": entry.who} for entry in entries}
        print_json(told)
    else:
        records = {entry.key: dated(entry) for entry in entries}
        print(f"{ledger.configured.name}: {ledger.path}")
        for line, attribute in zip(in_words(response), KINDS, strict=True):
            print(f"  {line} ({records.get(WRITTEN[attribute][0], 'never measured')})")
    if arguments.show:
        return 0
    code = told_of_file(ledger, arguments.config)
    if not code and not arguments.json:
        print("Next: start the service again, and walk once more to see.")
    return code
