"""`hobnail walk`: streams one velocity command until Ctrl-C or the end of --for, then stands.

Speeds are m/s and rad/s in the body frame: x forward, y left, turning to the left.
"""

from __future__ import annotations

import math
import sys
import time
from argparse import Namespace
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from hobnail.cli.options import Parser, add_json, add_socket, connect, number, print_json
from hobnail.cli.waiting import wait_for_state

if TYPE_CHECKING:
    from hobnail.service.client import Client

EVERY_S = 0.1
TTL_S = 0.5  # outlives four lost sends, ends the walk half a second after this program dies


def configure(parser: Parser) -> None:
    """Arguments and help."""
    speed = number("--vx", "m/s")
    parser.add_argument("--vx", metavar="M_S", type=speed, default=0.0, help="forward, m/s (negative: back)")
    parser.add_argument(
        "--vy",
        metavar="M_S",
        type=number("--vy", "m/s"),
        default=0.0,
        help="to the left, m/s (negative: right)",
    )
    parser.add_argument(
        "--yaw-rate",
        metavar="RAD_S",
        type=number("--yaw-rate", "rad/s"),
        default=0.0,
        help="turning to the left, rad/s (negative: right); 1 rad/s is 57.3 degrees a second",
    )
    parser.add_argument(
        "--pivot",
        metavar=("X", "Y"),
        nargs=2,
        type=number("--pivot", "m"),
        default=(0.0, 0.0),
        help="point, in m ahead and to the left of the robot's middle, that the velocities are given at",
    )
    parser.add_argument(
        "--for",
        dest="for_s",
        metavar="SECONDS",
        type=number("--for", "seconds", above=0),
        default=math.inf,
        help="how long (default: until Ctrl-C)",
    )
    add_json(parser, "print the last state as JSON")
    add_socket(parser)
    parser.example(
        "hobnail walk --vx 0.15",
        "hobnail walk --vx 0.1 --yaw-rate 0.3 --for 5     along an arc to the left",
        "hobnail walk --yaw-rate 0.5 --pivot 0.5 0        turn about a point half a metre ahead",
    )


def run(arguments: Namespace) -> int:
    """Walk, then stand; exit code 0 when the robot stands."""
    twist = (arguments.vx, arguments.vy, arguments.yaw_rate)
    if not any(twist):
        print(
            "hobnail: nothing to do: give --vx, --vy or --yaw-rate; `hobnail stand` stands still",
            file=sys.stderr,
        )
        return 64
    with connect(arguments) as client:
        before: dict[str, Any] = client.state()
        client.walk(*twist, pivot=tuple(arguments.pivot), ttl_s=TTL_S)
        if not arguments.json:
            until = "Ctrl-C to stand" if math.isinf(arguments.for_s) else f"for {arguments.for_s:g} s"
            print(
                f"walking {twist[0]:+.3f} m/s forward, {twist[1]:+.3f} m/s left, "
                f"{math.degrees(twist[2]):+.1f} deg/s; {until}",
                flush=True,
            )
        after = stream(client, twist, tuple(arguments.pivot), arguments.for_s)
    if arguments.json:
        print_json(after)
    else:
        print(f"{after['state']}; {_moved(before['pose'], after['pose'])}")
    return 0


def stream(
    client: Client,
    twist: tuple[float, float, float],
    pivot: tuple[float, float],
    for_s: float,
    *,
    clock: Callable[[], float] = time.monotonic,
    sleep: Callable[[float], None] = time.sleep,
) -> dict[str, Any]:
    """Send the command every 0.1 s for `for_s` seconds or until KeyboardInterrupt; the state after it.

    Raises what the client raises; the robot then stands by its own time-to-live.
    """
    started_s = clock()
    try:
        while (left_s := for_s - (clock() - started_s)) > 0:
            client.walk(*twist, pivot=pivot, ttl_s=TTL_S)
            sleep(min(EVERY_S, left_s))
    except KeyboardInterrupt:
        print(file=sys.stderr)  # off the line with the ^C
    client.stand()
    return wait_for_state(client, ("standing",), 30.0, clock=clock, sleep=sleep, tell=False)


def _moved(before: dict[str, float], after: dict[str, float]) -> str:
    ahead, aside = after["x_m"] - before["x_m"], after["y_m"] - before["y_m"]
    cos, sin = math.cos(before["yaw_rad"]), math.sin(before["yaw_rad"])
    turned = math.degrees(math.remainder(after["yaw_rad"] - before["yaw_rad"], math.tau))
    return (
        f"by its odometry {1000 * (cos * ahead + sin * aside):+.0f} mm forward, "
        f"{1000 * (cos * aside - sin * ahead):+.0f} mm left, turned {turned:+.1f} deg"
    )
