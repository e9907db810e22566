"""`hobnail state`: one look at the running robot, as text or as the JSON of the socket."""

from __future__ import annotations

from argparse import Namespace

from hobnail.cli.options import Parser, add_json, add_socket, connect, print_json


def configure(parser: Parser) -> None:
    """Arguments and help."""
    add_json(parser, "print the whole snapshot as one line of JSON")
    add_socket(parser)
    parser.example("hobnail state", "hobnail state --json | jq .pose")


def run(arguments: Namespace) -> int:
    """Print the snapshot."""
    with connect(arguments) as client:
        snapshot = client.state()
        if arguments.json:
            print_json(snapshot)
            return 0
        from hobnail.cli.screen import speaks_unicode, wants_color
        from hobnail.cli.view import ASCII, UNICODE, View, outline

        names, limits = outline(client.describe())
    view = View(names, limits, glyphs=UNICODE if speaks_unicode() else ASCII, color=wants_color())
    print("\n".join(view.draw(snapshot, height=1000)))
    return 0
