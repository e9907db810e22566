"""`hobnail posture`: moves the body over its standing feet, in mm and degrees; the feet stay."""

from __future__ import annotations

import math
import sys
from argparse import Namespace

from hobnail.cli.options import Parser, add_json, add_socket, connect, number, print_json
from hobnail.errors import EX_USAGE

ANGLES = {
    "roll": "positive lifts the left side",
    "pitch": "positive lowers the front",
    "yaw": "positive turns to the left",
}


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "--height-mm",
        metavar="MM",
        type=number("--height-mm", "mm", 0),
        help="hip roll axes above the ground",
    )
    for name, meaning in ANGLES.items():
        parser.add_argument(
            f"--{name}-deg", metavar="DEG", type=number(f"--{name}-deg", "degrees", -180, 180), help=meaning
        )
    parser.add_argument(
        "--lean-mm",
        metavar=("X", "Y"),
        nargs=2,
        type=number("--lean-mm", "mm"),
        help="shift over the feet: forward, to the left",
    )
    add_json(parser, "print the state as JSON")
    add_socket(parser)
    parser.example(
        "hobnail posture --height-mm 150 --pitch-deg 5", "hobnail posture --roll-deg 0 --lean-mm 0 0"
    )
    parser.epilog = f"{parser.epilog}\n\nWhat is left out stays as it is."


def run(arguments: Namespace) -> int:
    """Send it; what is out of the robot's limits is refused with them."""
    angles = {name: getattr(arguments, f"{name}_deg") for name in ANGLES}
    asked = [arguments.height_mm, arguments.lean_mm, *angles.values()]
    if all(value is None for value in asked):
        print(
            "hobnail: nothing to do: give a height, an angle or a lean; see `hobnail posture --help`",
            file=sys.stderr,
        )
        return EX_USAGE
    radians = {name: None if angle is None else math.radians(angle) for name, angle in angles.items()}
    lean_mm = arguments.lean_mm
    with connect(arguments) as client:
        client.posture(
            height_m=None if arguments.height_mm is None else arguments.height_mm / 1000.0,
            roll_rad=radians["roll"],
            pitch_rad=radians["pitch"],
            yaw_rad=radians["yaw"],
            lean_m=None if lean_mm is None else (lean_mm[0] / 1000.0, lean_mm[1] / 1000.0),
        )
        if arguments.json:
            print_json(client.state())
        else:
            print("on its way there")
    return 0
