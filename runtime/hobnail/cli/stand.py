"""`hobnail stand`: wakes the joints if need be, rises, and waits until the robot stands."""

from __future__ import annotations

from argparse import Namespace

from hobnail.cli.options import Parser, add_json, add_socket, add_wait, request_and_wait


def configure(parser: Parser) -> None:
    """Arguments and help."""
    add_wait(parser, "standing")
    add_json(parser, "print the last state as JSON")
    add_socket(parser)
    parser.example("hobnail stand", "hobnail stand && hobnail walk --vx 0.1 --for 5")


def run(arguments: Namespace) -> int:
    """Send the request; exit code 0 when the robot stands."""
    return request_and_wait(arguments, lambda client: client.stand(), ("standing",))
