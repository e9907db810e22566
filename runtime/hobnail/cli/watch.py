"""`hobnail watch`: the running robot live, redrawn in place; a line a second where there is no terminal."""

from __future__ import annotations

import contextlib
import signal
import sys
import time
from argparse import Namespace
from collections.abc import Callable, Iterable
from typing import Any

from hobnail.cli.options import Parser, add_json, add_socket, connect, number, print_json
from hobnail.cli.screen import Screen, is_live, speaks_unicode, wants_color
from hobnail.cli.view import ASCII, UNICODE, View, one_line, outline


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument(
        "--rate",
        metavar="HZ",
        type=number("--rate", "Hz", 0.1, 50),
        default=20.0,
        help="snapshots a second (default: 20)",
    )
    parser.add_argument(
        "--no-color", action="store_true", help="no colours (NO_COLOR in the environment does the same)"
    )
    add_json(parser, "stream every snapshot as a line of JSON")
    add_socket(parser)
    parser.example("hobnail watch", "hobnail watch --json --rate 5 | jq -c '[.state, .pose]'")


def run(arguments: Namespace) -> int:
    """Show snapshots until Ctrl-C or until the robot's program ends."""
    with connect(arguments) as client, contextlib.suppress(KeyboardInterrupt):
        snapshots = client.watch(rate_hz=arguments.rate)
        if arguments.json:
            for snapshot in snapshots:
                print_json(snapshot)
        elif is_live():
            names, limits = outline(client.describe())
            glyphs = UNICODE if speaks_unicode() else ASCII
            view = View(names, limits, glyphs=glyphs, color=wants_color(refused=arguments.no_color))
            _draw(view, snapshots)
        else:
            print_lines(snapshots)
    return 0


def print_lines(snapshots: Iterable[dict[str, Any]], clock: Callable[[], float] = time.monotonic) -> None:
    """A line a second, and one for each change of state, step or faults."""
    last_s, last = -1e9, None
    for snapshot in snapshots:
        route = snapshot.get("route") or {}
        now = (snapshot["state"], route.get("step"), [fault["name"] for fault in snapshot["faults"]])
        now_s = clock()
        if now != last or now_s - last_s >= 1.0:
            print(one_line(snapshot), flush=True)
            last_s, last = now_s, now


def _draw(view: View, snapshots: Iterable[dict[str, Any]]) -> None:
    # Ended by the service manager or by a closed window: leave the terminal whole all the same.
    before = signal.signal(signal.SIGTERM, lambda *_: sys.exit(128 + signal.SIGTERM))
    try:
        with Screen() as screen:
            for snapshot in snapshots:
                screen.show(view.draw(snapshot, *screen.size))
    finally:
        signal.signal(signal.SIGTERM, before)
