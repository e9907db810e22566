"""`hobnail off`: lowers the robot, ends every pulse, and waits until it is off."""

from __future__ import annotations

from argparse import Namespace

from hobnail.cli.options import Parser, add_json, add_socket, add_wait, request_and_wait


def configure(parser: Parser) -> None:
    """Arguments and help."""
    add_wait(parser, "off")
    add_json(parser, "print the last state as JSON")
    add_socket(parser)
    parser.example("hobnail off")


def run(arguments: Namespace) -> int:
    """Send the request; exit code 0 when the pulses have ended."""
    return request_and_wait(arguments, lambda client: client.off(), ("off", "stopped"))
