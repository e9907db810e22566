"""`hobnail reset`: unlatches a stop and clears faults whose cause is gone; moves nothing."""

from __future__ import annotations

from argparse import Namespace
from typing import Any

from hobnail.cli.options import Parser, add_json, add_socket, connect, print_json


def configure(parser: Parser) -> None:
    """Arguments and help."""
    add_json(parser)
    add_socket(parser)
    parser.example("hobnail reset", "hobnail reset && hobnail stand")


def run(arguments: Namespace) -> int:
    """Send the request and tell what is left."""
    with connect(arguments) as client:
        client.reset()
        snapshot: dict[str, Any] = client.state()
    if arguments.json:
        print_json(snapshot)
    else:
        print(f"{snapshot['state']}; `hobnail stand` wakes the robot")
        for fault in snapshot["faults"]:
            print(f"still there: {fault['name']}: {fault['message']}; next: {fault['next']}")
    return 0
