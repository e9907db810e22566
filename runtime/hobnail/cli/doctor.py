"""`hobnail doctor`: looks the machine over and says what keeps the robot from working, and what to do."""

from __future__ import annotations

import shutil
import sys
import textwrap
from argparse import ArgumentTypeError, Namespace
from collections import Counter
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

from hobnail.cli.options import Parser, add_json, print_json
from hobnail.errors import EX_CONFIG, EX_UNAVAILABLE

if TYPE_CHECKING:
    from hobnail.workshop.doctor.findings import Finding

MARKS = {"fine": "ok", "note": "note", "mend": "MEND"}
STYLES_OF = {"fine": "", "note": "warn", "mend": "alarm"}
SUBJECT = 14  # columns
IN_FILES = ("configuration", "calibration")


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "config",
        metavar="CONFIG",
        nargs="?",
        help="the robot (default: what the running service or its unit has, /etc/hobnail/robot.yaml)",
    )
    parser.add_argument(
        "--driver",
        metavar="NAME[:ARGUMENT]",
        help="what drives the servos (default: as the running service or its unit has it, else simulated)",
    )
    parser.add_argument(
        "--unit",
        metavar="NAME",
        type=_unit,
        default="hobnail",
        help="the service, such as hobnail@bramble (default: hobnail)",
    )
    parser.add_argument(
        "--socket", metavar="PATH", help="where the service listens (default: where the unit puts it)"
    )
    add_json(parser, "print one JSON object: findings with subject, grade, text and next")
    parser.example(
        "hobnail doctor",
        "hobnail doctor my-robot.yaml --driver pca9685",
        "hobnail doctor --json | jq '.findings[] | select(.grade == \"mend\")'",
    )
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Nothing is moved and nothing is written. Boards are only read, and not even that while a\n"
        "service holds them. Whatever hangs is given up after some seconds, and said.\n"
        "Grades: ok; note (worth knowing); MEND (keeps the robot from working).\n"
        "Exit codes: 0 nothing to mend; 78 the configuration or calibration is to be mended; 69\n"
        "something else is; 64 wrong usage."
    )


def run(arguments: Namespace) -> int:
    """Look, and tell; each finding as it comes."""
    from hobnail.workshop.doctor.case import Case
    from hobnail.workshop.doctor.examination import findings
    from hobnail.workshop.doctor.world import World

    case = Case(
        World(),
        unit_name=arguments.unit,
        config=Path(arguments.config) if arguments.config else None,
        driver=arguments.driver,
        socket=Path(arguments.socket).absolute() if arguments.socket else None,
    )
    found = []
    for finding in findings(case):
        found.append(finding)
        if not arguments.json:
            print("\n".join(_lines(finding)), flush=True)
    code = exit_code(found)
    if arguments.json:
        print_json({"ok": code == 0, "exit_code": code, "findings": [asdict(finding) for finding in found]})
        return code
    count = Counter(str(finding.grade) for finding in found)
    print(f"\n{count['mend'] or 'nothing'} to mend, {count['note'] or 'nothing'} worth knowing")
    return code


def exit_code(found: list[Finding]) -> int:
    """0 when nothing is to be mended; files are what can be mended at once, so they go first."""
    wrong = [finding.subject for finding in found if finding.grade == "mend"]
    if not wrong:
        return 0
    return EX_CONFIG if any(subject in IN_FILES for subject in wrong) else EX_UNAVAILABLE


def _lines(finding: Finding) -> list[str]:
    from hobnail.cli.screen import wants_color
    from hobnail.cli.view import PLAIN, STYLES, printable

    mark = MARKS[finding.grade]
    indent = 5 + SUBJECT
    # A line of a pipe is not broken, so that it can be searched.
    width = shutil.get_terminal_size().columns - 1 if sys.stdout.isatty() else 1_000_000
    width = max(width, indent + 20)

    def wrapped(text: str, first: str) -> list[str]:
        return textwrap.wrap(
            printable(text),
            width,
            initial_indent=first,
            subsequent_indent=" " * indent,
            break_on_hyphens=False,
        )

    lines = wrapped(finding.text, f"{mark:<5}{finding.subject:<{SUBJECT}}")
    if finding.next:
        lines += wrapped(f"next: {finding.next}", " " * indent)
    style = STYLES_OF[finding.grade]
    if style and wants_color():
        lines[0] = f"{STYLES[style]}{lines[0][:4]}{PLAIN}{lines[0][4:]}"
    return lines


def _unit(text: str) -> str:
    """An argparse type: a unit's name, without what could be taken for an option or a path."""
    name = text.removesuffix(".service")
    if not name or name[0] == "-" or not all(part.isalnum() or part in "@-_.:" for part in name):
        raise ArgumentTypeError(f"--unit is {text!r}, allowed a unit such as hobnail or hobnail@bramble")
    return name
