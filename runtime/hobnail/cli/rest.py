"""`hobnail rest`: lowers the robot onto its belly, pulses on, and waits until it lies."""

from __future__ import annotations

from argparse import Namespace

from hobnail.cli.options import Parser, add_json, add_socket, add_wait, request_and_wait


def configure(parser: Parser) -> None:
    """Arguments and help."""
    add_wait(parser, "resting")
    add_json(parser, "print the last state as JSON")
    add_socket(parser)
    parser.example("hobnail rest")


def run(arguments: Namespace) -> int:
    """Send the request; exit code 0 when the robot lies."""
    return request_and_wait(arguments, lambda client: client.rest(), ("resting",))
