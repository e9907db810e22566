"""`hobnail stop`: the emergency stop from a terminal; needs no claim and does not wait for the end."""

from __future__ import annotations

import sys
from argparse import Namespace

from hobnail.cli.options import Parser, add_json, add_socket, connect, print_json
from hobnail.errors import ServiceError


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "--now",
        action="store_true",
        help="end all pulses at once, the robot drops (stop category 0 of IEC 60204-1); without it the feet "
        "are planted and the robot crouches first (category 1)",
    )
    parser.add_argument(
        "--reason", metavar="TEXT", default="", help="kept with the stop, for who comes after you"
    )
    add_json(parser)
    add_socket(parser)
    parser.example("hobnail stop", 'hobnail stop --now --reason "smoke at a knee"')
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "The stop latches: nothing moves until `hobnail reset`, `hobnail stand` and a fresh command.\n"
        "A stop in software is not a safety-rated function, and no substitute for a switch in the\n"
        "servo supply."
    )


def run(arguments: Namespace) -> int:
    """Send the stop; exit code 0 once it is acknowledged."""
    category = 0 if arguments.now else 1
    try:
        with connect(arguments) as client:
            client.stop(category=category, reason=arguments.reason)
    except ServiceError:
        advice = "cut the servo supply, or run `hobnail-release` on the robot"
        print(f"hobnail: NOT STOPPED by this command: {advice}", file=sys.stderr)
        raise
    if arguments.json:
        print_json({"stop": {"category": category, "reason": arguments.reason}})
    else:
        how = "pulses ended" if category == 0 else "planting the feet, then crouching, then no pulses"
        print(f"stop taken: {how}. Then: hobnail reset, hobnail stand")
    return 0
