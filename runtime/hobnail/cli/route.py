"""`hobnail route`: sends a route file to the running robot and shows how far it is; Ctrl-C cancels."""

from __future__ import annotations

import shutil
import sys
from argparse import Namespace
from collections.abc import Iterable, Iterator
from typing import Any

from hobnail.cli.options import Parser, add_json, add_socket, connect, print_json
from hobnail.cli.screen import is_live, speaks_unicode
from hobnail.cli.view import ASCII, UNICODE, duration, gauge, printable
from hobnail.errors import EX_TEMPFAIL, EX_USAGE

CANCELLED = 130
WATCH_HZ = 10.0


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "file", metavar="FILE", nargs="?", help="the route, such as config/routes/square.yaml"
    )
    parser.add_argument(
        "--cancel", action="store_true", help="end the route that is being walked; the robot stands"
    )
    parser.add_argument(
        "--check", action="store_true", help="only read FILE and list its steps; no robot needed"
    )
    add_json(parser, "print the progress as lines of JSON")
    add_socket(parser)
    parser.example(
        "hobnail stand && hobnail route config/routes/square.yaml",
        "hobnail route --check my-route.yaml",
        "hobnail route --cancel",
    )


def run(arguments: Namespace) -> int:
    """Exit code 0 when the route was walked to its end, 75 when it ended before, 130 when cancelled."""
    if arguments.cancel == (arguments.file is not None):
        print("hobnail: give either a FILE or --cancel; see `hobnail route --help`", file=sys.stderr)
        return EX_USAGE
    if arguments.cancel:
        with connect(arguments) as client:
            client.route(cancel=True)
        print("cancelled; the robot stands")
        return 0
    from hobnail.service.route_file import load_route, steps_to_json

    steps = load_route(arguments.file)
    if arguments.check:
        for number, step in enumerate(steps, 1):
            print(f"{number:>3}  {printable(step.describe())}")
        return 0
    with connect(arguments) as client:
        client.route(steps_to_json(steps))
        try:
            return follow(client.watch(rate_hz=WATCH_HZ), json=arguments.json)
        except KeyboardInterrupt:
            client.route(cancel=True)
            print("\ncancelled; the robot stands", file=sys.stderr)
            return CANCELLED


def follow(snapshots: Iterable[dict[str, Any]], *, json: bool = False) -> int:
    """Show the progress until the route is done; the exit code."""
    for progress in _told(snapshots, json=json):
        if progress is None:
            print("hobnail: the route was ended before its last step; see `hobnail state`", file=sys.stderr)
            return EX_TEMPFAIL
        if progress["failure"]:
            print(f"hobnail: {progress['failure']}", file=sys.stderr)
            return EX_TEMPFAIL
        if progress["done"]:
            return 0
    print("hobnail: the service ended before the route did", file=sys.stderr)
    return EX_TEMPFAIL


def _told(snapshots: Iterable[dict[str, Any]], *, json: bool) -> Iterator[dict[str, Any] | None]:
    """Each snapshot's progress, shown on the way: one line redrawn, or a line a step."""
    live = is_live() and not json
    glyphs = UNICODE if speaks_unicode() else ASCII
    step = 0
    for snapshot in snapshots:
        progress = snapshot.get("route")
        if json and progress is not None:
            print_json(progress)
        elif progress is not None:
            text = f"{progress['step']:>3}/{progress['steps']}  {printable(progress['description'])}"
            if progress["done"] and not progress["failure"]:
                text = f"all {progress['steps']} steps walked in {duration(progress['elapsed_s'])}"
            if live:
                done = f"{gauge(progress['done_share'], 20, glyphs)} {progress['done_share']:4.0%}"
                line = f"{done}  {text}"[: shutil.get_terminal_size().columns - 1]
                print(f"\r\x1b[K{line}", end="\n" if progress["done"] else "", flush=True)
            elif progress["step"] != step or progress["done"]:
                print(text, flush=True)
            step = progress["step"]
        yield progress
