"""`hobnail run`: the robot's program itself: socket, states, control loop, servos; with a live view."""

from __future__ import annotations

import os
import sys
from argparse import Namespace
from pathlib import Path

from hobnail.cli.options import Parser, add_driver, add_json, print_json


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument("config", metavar="CONFIG", help="the robot, such as config/juniper.yaml")
    add_driver(parser)
    parser.add_argument(
        "--route",
        metavar="FILE",
        help="stand up, walk this route, lie down, pulses off, end; without it, serve",
    )
    parser.add_argument(
        "--socket",
        metavar="PATH",
        help="where to listen (default: $HOBNAIL_SOCKET, else the runtime directory)",
    )
    parser.add_argument("--group", metavar="NAME", help="group whose members may use the socket")
    parser.add_argument(
        "--realtime",
        action="store_true",
        help="ask for real-time scheduling and locked memory; says so when refused",
    )
    parser.add_argument(
        "--state-dir",
        metavar="DIR",
        default=_first(os.environ.get("STATE_DIRECTORY")),
        help="keep the last posture and recordings of stops here, over a reboot (default: $STATE_DIRECTORY)",
    )
    parser.add_argument(
        "--log-dir",
        metavar="DIR",
        default=_first(os.environ.get("LOGS_DIRECTORY")),
        help="keep events.log here (default: $LOGS_DIRECTORY, else the socket's directory)",
    )
    parser.add_argument(
        "--no-color", action="store_true", help="no colours (NO_COLOR in the environment does the same)"
    )
    parser.add_argument("--plain", action="store_true", help="lines instead of the live view")
    add_json(parser, "no view; print the summary at the end as JSON")
    parser.example(
        "hobnail run config/juniper.yaml",
        "hobnail run config/juniper.yaml --route config/routes/bench-round.yaml",
        "hobnail run /etc/hobnail/robot.yaml --driver pca9685 --realtime",
    )
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Ctrl-C lies down, ends the pulses and ends; a second Ctrl-C ends the pulses at once.\n"
        "Exit codes: 0 done; 75 a route not walked to its end; 78 a wrong file; 69 no such driver or bus."
    )


def run(arguments: Namespace) -> int:
    """Run until told to end; the exit code of the service."""
    from hobnail.config import load_robot

    robot = load_robot(arguments.config)
    route = None
    if arguments.route:
        from hobnail.service.route_file import load_route

        route = load_route(arguments.route, robot)

    from hobnail.cli.live import Display
    from hobnail.service.serve import run as serve
    from hobnail.service.socket_file import default_path

    with Display(robot, plain=arguments.plain or arguments.json, color=not arguments.no_color) as display:
        code = serve(
            robot,
            driver=arguments.driver,
            socket_path=Path(arguments.socket) if arguments.socket else default_path(),
            route=route,
            on_state=display.note if arguments.json else display.show,
            state_dir=Path(arguments.state_dir) if arguments.state_dir else None,
            log_dir=Path(arguments.log_dir) if arguments.log_dir else None,
            realtime=arguments.realtime,
            group=arguments.group,
        )
    if arguments.json:
        print_json({**display.summary.as_json(), "exit_code": code})
    elif display.summary.last is not None:
        print("\n".join(display.summary.lines()))
    if display.trouble:
        print(f"hobnail: the view failed while the robot ran: {display.trouble}", file=sys.stderr)
    return code


def _first(directories: str | None) -> str | None:
    """The first of a service manager's colon-separated directories."""
    return directories.split(":")[0] if directories else None
