"""`hobnail rehearse`: walks a configuration in a physics engine and says whether it walks well enough.

Errors are injected with --inject NAME=VALUE, in the SI units of their names.
"""

from __future__ import annotations

import sys
from argparse import ArgumentTypeError, Namespace
from collections.abc import Callable
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

from hobnail.cli.options import Parser, add_json, number, print_json
from hobnail.errors import EX_USAGE

if TYPE_CHECKING:
    from hobnail.robot import Robot
    from hobnail.workshop.rehearse.scenarios import Scenario

EX_MISSED = 1


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument("config", metavar="CONFIG", help="the robot, such as config/juniper.yaml")
    what = parser.add_argument_group("what to rehearse (default: every built-in scenario)")
    what.add_argument(
        "--scenario",
        metavar="NAME",
        action="append",
        default=[],
        help="a built-in scenario; may be given several times; --list names them",
    )
    what.add_argument("--list", action="store_true", help="list the built-in scenarios and stop")
    what.add_argument(
        "--walk",
        nargs=3,
        metavar=("VX", "VY", "YAW_RATE"),
        type=number("--walk", "m/s, m/s and rad/s"),
        help="one velocity: m/s ahead, m/s to the left, rad/s to the left",
    )
    what.add_argument("--gait", metavar="NAME", help="the gait of --walk (default: the robot's first)")
    what.add_argument("--route", metavar="FILE", help="a route file")
    what.add_argument("--commands", metavar="FILE", help="a command file of your own: timed requests, YAML")
    what.add_argument("--seed", type=_seed, default=0, help="of the random scenario and of random errors")
    parser.add_argument(
        "--inject",
        metavar="NAME=VALUE",
        action="append",
        type=_injection,
        default=[],
        help="inject an error, such as battery_shift_m=0.02,0,0 or friction=0.3; --list names them",
    )
    parser.add_argument("--report", metavar="FILE", help="write an HTML report with plots")
    parser.add_argument("--film", metavar="FILE", help="write a film (.gif or .webp) of the last scenario")
    add_json(parser, "print all measures as JSON, SI units")
    parser.example(
        "hobnail rehearse config/juniper.yaml",
        "hobnail rehearse config/juniper.yaml --scenario straight --film walk.gif --report walk.html",
        "hobnail rehearse config/juniper.yaml --walk 0.15 0 0.4 --inject friction=0.4",
    )
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Verdicts: ok; missed (walks, but not as truly or as level as it should); FELL.\n"
        "Exit codes: 0 all ok; 1 something missed or fell; 64 wrong usage; 69 the physics engine is missing."
    )


def run(arguments: Namespace) -> int:
    """Rehearse and tell."""
    from hobnail.workshop.rehearse import SCENARIOS, Disturbances, measure
    from hobnail.workshop.rehearse import run as rehearse_run
    from hobnail.workshop.rehearse.report import as_json, page, table

    if arguments.gait and not arguments.walk:
        print("hobnail: --gait goes with --walk; see `hobnail rehearse --help`", file=sys.stderr)
        return EX_USAGE
    from hobnail.config import load_robot

    robot = load_robot(arguments.config)
    if arguments.list:
        print("\n".join(_listing(robot, SCENARIOS)))
        return 0
    given: dict[str, Any] = dict(arguments.inject)
    disturbances = Disturbances(seed=arguments.seed, **given)
    _check_outputs(arguments)
    runs = []
    for scenario in _chosen(arguments, robot):
        if not arguments.json and sys.stderr.isatty():
            print(f"{scenario.name}: {scenario.about} ...", file=sys.stderr)
        recording = rehearse_run(robot, scenario, disturbances)
        runs.append((recording, measure(recording)))
    results = [result for _, result in runs]
    if arguments.report:
        Path(arguments.report).write_text(page(robot.name, runs), encoding="utf-8")
    if arguments.film:
        from hobnail.workshop.rehearse.film import film

        film(runs[-1][0], arguments.film)
    if arguments.json:
        print_json({"robot": robot.name, "digest": robot.digest, "results": [as_json(r) for r in results]})
    else:
        print("\n".join(table(results)))
    return EX_MISSED if any(result.failures() for result in results) else 0


def _chosen(arguments: Namespace, robot: Robot) -> list[Scenario]:
    from hobnail.service.route_file import load_route
    from hobnail.workshop.rehearse.scenarios import SCENARIOS, route, scenario, walking
    from hobnail.workshop.rehearse.script import load_script

    chosen = [scenario(name, robot, seed=arguments.seed) for name in arguments.scenario]
    if arguments.walk:
        if arguments.gait and arguments.gait not in [gait.name for gait in robot.gaits]:
            from hobnail.errors import CommandError

            known = ", ".join(gait.name for gait in robot.gaits)
            raise CommandError(f"--gait is {arguments.gait!r}; allowed: {known}")
        chosen.append(walking(robot, *arguments.walk, gait=arguments.gait))
    if arguments.route:
        path = Path(arguments.route)
        chosen.append(route(load_route(path, robot), robot, name=path.stem, about=f"the route {path.name}"))
    if arguments.commands:
        chosen.append(load_script(arguments.commands, robot))
    return chosen or [scenario(name, robot, seed=arguments.seed) for name in SCENARIOS]


def _check_outputs(arguments: Namespace) -> None:
    """Find out before the work whether its fruits can be written."""
    for name in (arguments.report, arguments.film):
        if name and not Path(name).resolve().parent.is_dir():
            raise FileNotFoundError(2, "its folder does not exist", name)
    if arguments.report:
        from hobnail.workshop.rehearse.report import figure_class

        figure_class()
    if arguments.film:
        from hobnail.workshop.rehearse.film import check_name

        check_name(arguments.film)


def _listing(robot: Robot, names: tuple[str, ...]) -> list[str]:
    from hobnail.workshop.rehearse.disturbances import Disturbances
    from hobnail.workshop.rehearse.scenarios import scenario

    lines = ["scenarios:"]
    lines += [f"  {name:<12} {scenario(name, robot).about}" for name in names]
    lines += ["", "errors to inject (default):"]
    sound = Disturbances()
    lines += [
        f"  {field.name:<18} {_text(getattr(sound, field.name))}"
        for field in fields(Disturbances)
        if field.name != "seed"
    ]
    return lines


def _text(value: object) -> str:
    if isinstance(value, tuple):
        return ",".join(f"{part:g}" for part in value)
    if isinstance(value, float):
        return f"{value:g}"
    return "-" if value in ("", None) else str(value)


def _injection(text: str) -> tuple[str, object]:
    """An argparse type: NAME=VALUE; numbers by commas where there are several."""
    from hobnail.workshop.rehearse.disturbances import Disturbances

    name, equals, value = text.partition("=")
    known = {field.name: field for field in fields(Disturbances) if field.name != "seed"}
    if not equals or name not in known:
        raise ArgumentTypeError(f"{text!r} is no NAME=VALUE with one of the names {', '.join(known)}")
    if name == "weak_joint":
        return name, value
    read: Callable[[str], float] = number(name, "its unit")
    numbers = tuple(read(part) for part in value.split(","))
    wanted = {"battery_shift_m": 3, "push_ns": 2}.get(name, 1)
    if len(numbers) != wanted:
        raise ArgumentTypeError(f"{name} is {value!r}, allowed {wanted} number(s) with commas between")
    return name, numbers if wanted > 1 else numbers[0]


def _seed(text: str) -> int:
    """An argparse type: a whole number from 0 on."""
    if not (text.isascii() and text.isdigit() and len(text) <= 18):
        raise ArgumentTypeError(f"--seed is {text!r}, allowed a whole number from 0 to 10^18")
    return int(text)
