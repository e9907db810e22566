"""Options that commands share: a parser that exits as sysexits says, numbers with units, the socket.

Imports nothing heavy: every command pays for it at start.
"""

from __future__ import annotations

import argparse
import json
import math
import re
import sys
from collections.abc import Callable
from typing import TYPE_CHECKING, NoReturn

from hobnail.errors import EX_USAGE

if TYPE_CHECKING:
    from hobnail.service.client import Client


class Parser(argparse.ArgumentParser):
    """argparse with exit code 64 on wrong usage, no abbreviated options (a half-typed one must
    not move a robot), and negative numbers in any notation."""

    def __init__(self, *, prog: str, description: str = "") -> None:
        super().__init__(
            prog=prog,
            description=description,
            allow_abbrev=False,
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        # argparse takes -1e-3 for an option otherwise.
        self._negative_number_matcher = re.compile(r"^-(\d+\.?\d*|\.\d+)([eE][-+]?\d+)?$|^-(inf|nan)$")

    def example(self, *lines: str) -> None:
        """Show these command lines at the end of the help."""
        self.epilog = "examples:\n" + "\n".join(f"  {line}" for line in lines)

    def error(self, message: str) -> NoReturn:
        """Say what is wrong and where the help is; exit 64."""
        print(f"{self.prog}: {message}; see `{self.prog} --help`", file=sys.stderr)
        raise SystemExit(EX_USAGE)


def number(
    name: str, unit: str, low: float = -math.inf, high: float = math.inf, *, above: float | None = None
) -> Callable[[str], float]:
    """An argparse type: a finite number between `low` and `high`, or above `above`."""

    def read(text: str) -> float:
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        fits = math.isfinite(value) and low <= value <= high and (above is None or value > above)
        if not fits:
            raise argparse.ArgumentTypeError(f"{name} is {text!r}, allowed {allowed}")
        return value

    if above is not None:
        allowed = f"a number of {unit} above {above:g}"
    elif math.isinf(low) and math.isinf(high):
        allowed = f"a number of {unit}"
    else:
        allowed = f"{low:g} to {high:g} {unit}"
    return read


def whole(name: str, low: int, high: int) -> Callable[[str], int]:
    """An argparse type: a whole number between `low` and `high`."""

    def read(text: str) -> int:
        if not re.fullmatch(r"[0-9]{1,9}", text, re.ASCII) or not low <= int(text) <= high:
            raise argparse.ArgumentTypeError(f"{name} is {text!r}, allowed a whole number, {low} to {high}")
        return int(text)

    return read


def add_socket(parser: argparse.ArgumentParser) -> None:
    """`--socket PATH`, and `--timeout SECONDS` for the answer."""
    parser.add_argument(
        "--socket",
        metavar="PATH",
        help="socket of the running robot (default: $HOBNAIL_SOCKET, or where `hobnail run` puts it)",
    )
    parser.add_argument(
        "--timeout",
        metavar="SECONDS",
        type=number("--timeout", "seconds", above=0),
        default=2.0,
        help="how long to wait for an answer (default: 2)",
    )


def add_driver(parser: Parser) -> None:
    """--driver NAME[:ARGUMENT]."""
    parser.add_argument(
        "--driver",
        metavar="NAME[:ARGUMENT]",
        default="simulated",
        help="what the pulses go to: simulated (default), pca9685, chip-model, or another that is installed",
    )


def add_json(parser: argparse.ArgumentParser, what: str = "print JSON instead of text") -> None:
    """`--json`."""
    parser.add_argument("--json", action="store_true", help=what)


def add_wait(parser: argparse.ArgumentParser, state: str) -> None:
    """`--no-wait` and `--within SECONDS`, for commands that wait until the robot is in a state."""
    parser.add_argument("--no-wait", action="store_true", help=f"do not wait until the robot is {state}")
    parser.add_argument(
        "--within",
        metavar="SECONDS",
        type=number("--within", "seconds", above=0),
        default=60.0,
        help="give up waiting after this time (default: 60); the robot goes on",
    )


def request_and_wait(
    arguments: argparse.Namespace, request: Callable[[Client], object], wanted: tuple[str, ...]
) -> int:
    """Send one request and, unless told not to, wait for a state; print what came of it."""
    from hobnail.cli.waiting import wait_for_state

    with connect(arguments) as client:
        request(client)
        snapshot = client.state() if arguments.no_wait else wait_for_state(client, wanted, arguments.within)
    if arguments.json:
        print_json(snapshot)
    elif snapshot["state"] in wanted:
        print(snapshot["state"])
    else:
        print(f"{snapshot['state']}, on its way to {wanted[0]}")
    return 0


def connect(arguments: argparse.Namespace) -> Client:
    """A client of the running robot; raises ServiceUnavailableError when none answers."""
    from hobnail.service.client import Client

    return Client(arguments.socket, timeout_s=arguments.timeout)


def print_json(value: object) -> None:
    """One JSON text on one line."""
    print(json.dumps(value, allow_nan=False, separators=(",", ":")), flush=True)
