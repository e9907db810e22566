"""`hobnail gait`: changes the gait of the running robot, walking or standing."""

from __future__ import annotations

from argparse import Namespace
from typing import Any

from hobnail.cli.options import Parser, add_json, add_socket, connect, print_json


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "name", metavar="NAME", nargs="?", help="one of the robot's gaits; left out: list them"
    )
    add_json(parser, "print the list as JSON")
    add_socket(parser)
    parser.example("hobnail gait", "hobnail gait crawl")


def run(arguments: Namespace) -> int:
    """Change it, or list what there is."""
    with connect(arguments) as client:
        if arguments.name is not None:
            client.gait(arguments.name)
            if not arguments.json:
                print(f"gait {arguments.name}")
                return 0
        described: dict[str, Any] = client.describe()
        now = client.state()["gait"]
    if arguments.json:
        print_json({"gaits": described["gaits"], "now": now})
    else:
        print("\n".join(f"{'*' if name == now else ' '} {name}" for name in described["gaits"]))
    return 0
