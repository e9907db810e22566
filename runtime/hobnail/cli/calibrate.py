"""`hobnail calibrate`: measures directions, trims, maps, limits and clocks on the bench, and keeps them.

The session itself is `hobnail.workshop.calibrate`.
"""

from __future__ import annotations

import getpass
import re
import sys
from argparse import Namespace
from contextlib import suppress
from dataclasses import replace
from pathlib import Path
from time import sleep
from typing import TYPE_CHECKING

from hobnail.cli.options import Parser, add_driver, add_json, number, print_json, whole
from hobnail.errors import EX_USAGE, CommandError, ConfigError, ServiceError

if TYPE_CHECKING:
    from hobnail.robot import Robot
    from hobnail.workshop.calibrate.effects import Steps
    from hobnail.workshop.calibrate.ledger import Ledger

STEP_NAMES = ("direction", "trim", "map", "limits")


def configure(parser: Parser) -> None:
    """Arguments and help."""
    parser.add_argument("config", metavar="CONFIG", help="the robot, such as config/juniper.yaml")
    what = parser.add_argument_group("what to measure (default: every step at every joint, in order)")
    what.add_argument("--joint", metavar="NAME", action="append", default=[], help="this joint; repeatable")
    what.add_argument("--leg", metavar="NAME", action="append", default=[], help="the joints of this leg")
    what.add_argument(
        "--step", action="append", choices=STEP_NAMES, default=[], help="this step only; repeatable"
    )
    what.add_argument("--clock", metavar="BOARD", help="the true clock of this board, by its frame rate")
    what.add_argument(
        "--measured-hz",
        metavar="HZ",
        type=number("--measured-hz", "Hz", above=0),
        help="with --clock: the frame rate as measured already; nothing is driven",
    )
    add_driver(parser)
    parser.add_argument(
        "--who", metavar="NAME", default=None, help="who measures, for the record (default: the login)"
    )
    parser.add_argument(
        "--teeth",
        metavar="N",
        type=whole("--teeth", 10, 60),
        default=25,
        help="teeth of the servos' splines, for advice on seating horns (default: 25, as most have)",
    )
    parser.add_argument(
        "--margin-us",
        metavar="US",
        type=number("--margin-us", "us", 0, 200),
        default=20.0,
        help="how far limits stay clear of where a servo buzzes (default: 20)",
    )
    parser.add_argument(
        "--points",
        metavar="N",
        type=whole("--points", 2, 9),
        default=3,
        help="points of a pulse map (default: 3)",
    )
    parser.add_argument("--socket", metavar="PATH", help="where the robot's service would listen")
    parser.add_argument(
        "--state-dir", metavar="DIR", help="where the service keeps the last posture, if it does"
    )
    other = parser.add_argument_group("instead of measuring")
    other.add_argument(
        "--set",
        metavar="KEY=VALUE",
        action="append",
        default=[],
        help="keep this value, with one --joint or --board; keys and units as in the file",
    )
    other.add_argument("--board", metavar="NAME", help="the board of --set oscillator_mhz=...")
    other.add_argument("--show", action="store_true", help="print what is measured, when and by whom")
    other.add_argument("--undo", action="store_true", help="take the last change back; again, the one before")
    add_json(parser, "with --show, --set, --undo or --measured-hz: print the calibration as JSON")
    parser.example(
        "hobnail calibrate my-robot.yaml --driver pca9685",
        "hobnail calibrate my-robot.yaml --driver pca9685 --leg left-front --step trim",
        "hobnail calibrate my-robot.yaml --driver pca9685 --clock main",
        "hobnail calibrate my-robot.yaml --joint left-front.knee --set trim_deg=-3.5 --who gardener",
        "hobnail calibrate my-robot.yaml --show",
    )
    parser.epilog = (
        f"{parser.epilog}\n\n"
        "Put the robot on a stand. One joint at a time gets pulses and moves, slowly, when you say so. What\n"
        "you accept is written at once to <robot>.calibration.yaml, beside the configuration, with its\n"
        "history.\n"
        "Answers may come from a pipe, a line each.\n"
        "Exit codes: 0 done; 64 wrong usage; 65 the answers ended early; 69 no driver, or the service runs;\n"
        "78 a file cannot be used."
    )


def run(arguments: Namespace) -> int:
    """Calibrate, or do what was asked instead."""
    problem = _misuse(arguments)
    if problem:
        print(f"hobnail: {problem}; see `hobnail calibrate --help`", file=sys.stderr)
        return EX_USAGE
    from hobnail.config import load_robot
    from hobnail.workshop.calibrate.ledger import Ledger

    configured = load_robot(arguments.config, calibrated=False)
    ledger = Ledger(arguments.config, configured, arguments.who or login())
    if arguments.show:
        return report(ledger, arguments.json)
    ledger.check_writable()
    if arguments.undo:
        change = ledger.undo()
        return _kept(ledger, arguments, f"{change.what}: {change.old} -> {change.new}")
    if arguments.set:
        part = arguments.board or arguments.joint[0]
        check_known("--board" if arguments.board else "--joint", part, _parts(configured, arguments.board))
        ledger.set(part, arguments.set)
        return _kept(ledger, arguments, f"kept for {part}: {', '.join(arguments.set)}")
    if arguments.clock:
        check_known("--clock", arguments.clock, [board.name for board in configured.boards])
    if arguments.measured_hz is not None:
        from hobnail.workshop.calibrate.clock import check_fresh, true_oscillator_hz

        board = next(board for board in ledger.robot.boards if board.name == arguments.clock)
        oscillator_hz = true_oscillator_hz(board, arguments.measured_hz)
        check_fresh(board, arguments.measured_hz)
        ledger.keep(board.name, {"oscillator_hz": oscillator_hz})
        return _kept(ledger, arguments, f"kept for {board.name}: a clock of {oscillator_hz / 1e6:.4f} MHz")
    joints = _joints(arguments, configured)
    before = len(ledger.calibration.history)

    def kept() -> str:
        count = len(ledger.calibration.history) - before
        return f"{count} value{'' if count == 1 else 's'} kept"

    try:
        _bench(arguments, ledger, joints)
    except (KeyboardInterrupt, SystemExit):
        print(f"\nhobnail: ended, no pulses are sent; {kept()}, in {ledger.path}", file=sys.stderr)
        raise
    return _kept(ledger, arguments, kept())


def login() -> str:
    """Who is logged in, as far as a record can hold it."""
    try:
        name = getpass.getuser()
    except (KeyError, OSError):
        name = ""
    return re.sub(r"[^\w .,'@+-]", "", name)[:60] or "unknown"


def report(ledger: Ledger, as_json: bool) -> int:
    """Print what the calibration holds."""
    from hobnail.cli import calibration_report

    if as_json:
        print_json(calibration_report.as_json(ledger))
    else:
        print("\n".join(calibration_report.lines(ledger)))
    return 0


def check_known(option: str, name: str, known: list[str]) -> None:
    """Raises CommandError for a name that is not there."""
    if name not in known:
        from hobnail.config.fields import nearest

        hint = nearest(name, known)
        raise CommandError(
            f"{option} is {name[:60]!r}; allowed: {', '.join(known)}{'. ' if hint else ''}{hint}"
        )


def told_of_file(ledger: Ledger, config: str) -> int:
    """Say what to do next; 78 when the robot can no longer be used as it is calibrated now."""
    from hobnail.config import load_robot

    try:
        load_robot(config)
    except ConfigError as error:
        print(
            f"hobnail: kept in {ledger.path}, but the robot cannot be used with it; correct it, or take it "
            "back with `hobnail calibrate --undo`:",
            file=sys.stderr,
        )
        for line in str(error).splitlines():
            print(f"hobnail: {line}", file=sys.stderr)
        return error.exit_code
    return 0


def _misuse(arguments: Namespace) -> str:
    """What does not go together; empty when all does."""
    instead = [
        option
        for option, given in (
            ("--show", arguments.show),
            ("--undo", arguments.undo),
            ("--set", arguments.set),
            ("--clock", arguments.clock),
        )
        if given
    ]
    if len(instead) > 1:
        return f"{' and '.join(instead)} do not go together: give one"
    if arguments.set and len(arguments.joint) + bool(arguments.board) != 1:
        return "--set goes with one --joint or one --board"
    if arguments.board and not arguments.set:
        return "--board goes with --set; a clock is measured by --clock"
    if arguments.measured_hz is not None and not arguments.clock:
        return "--measured-hz goes with --clock"
    if arguments.json and not (instead and (arguments.clock is None or arguments.measured_hz is not None)):
        return "--json goes with --show, --set, --undo or --measured-hz"
    return ""


def _kept(ledger: Ledger, arguments: Namespace, text: str) -> int:
    if arguments.json:
        report(ledger, True)
    else:
        print(f"{text}, in {ledger.path}")
    code = told_of_file(ledger, arguments.config)
    if not code and not arguments.json:
        print(f"Next: `hobnail check {arguments.config}`; a service that runs must be started again.")
    return code


def _parts(robot: Robot, boards: bool) -> list[str]:
    return [part.name for part in (robot.boards if boards else robot.joints)]


def _joints(arguments: Namespace, robot: Robot) -> list[str]:
    """The joints asked for, in the robot's order."""
    names = [joint.name for joint in robot.joints]
    for name in arguments.joint:
        check_known("--joint", name, names)
    for leg in arguments.leg:
        check_known("--leg", leg, [each.name for each in robot.legs])
    wanted = set(arguments.joint)
    wanted |= {joint.name for leg in robot.legs if leg.name in arguments.leg for joint in leg.joints}
    return [name for name in names if name in wanted or not (arguments.joint or arguments.leg)]


def _bench(arguments: Namespace, ledger: Ledger, joints: list[str]) -> None:
    """Run the session on the driver; the pulses end however it ends."""
    from hobnail.cli.dialogue import Dialogue, ended_by_signals
    from hobnail.service.drivers import open_driver
    from hobnail.service.socket_file import default_path, kept_free
    from hobnail.workshop.calibrate.bench import JointBench, with_limits_of_both
    from hobnail.workshop.calibrate.session import play
    from hobnail_drivers.board_notes import FILE_NAME, note_boards

    socket_path = Path(arguments.socket) if arguments.socket else default_path()
    robot = ledger.robot
    refuse_other_services(robot, socket_path)
    with ended_by_signals(), kept_free(socket_path):
        driver = open_driver(arguments.driver, with_limits_of_both(robot, ledger.configured))
        with suppress(OSError):  # a help for `hobnail-release`, not a need
            note_boards(socket_path.parent / FILE_NAME, driver.notes())
        dialogue = Dialogue()
        if driver.is_model:
            dialogue.say(
                f"The driver, {arguments.driver}, is a model: nothing moves in the room, and what you accept "
                "is kept all the same. On the robot: --driver pca9685.\n"
            )
        steps = _session(arguments, ledger, robot, joints, socket_path.parent)
        with JointBench(driver, robot, sleep=sleep) as bench:
            play(steps, bench, dialogue, ledger)


def _session(
    arguments: Namespace, ledger: Ledger, robot: Robot, joints: list[str], runtime_dir: Path
) -> Steps[None]:
    from hobnail.cli.calibration_report import notes
    from hobnail.config import digest_on_disk
    from hobnail.workshop.calibrate.clock import clock_session
    from hobnail.workshop.calibrate.session import session
    from hobnail.workshop.calibrate.start import start_posture

    start = start_posture(
        replace(robot, digest=digest_on_disk(arguments.config)),
        runtime_dir,
        Path(arguments.state_dir) if arguments.state_dir else None,
    )
    if arguments.clock:
        board = next(board for board in robot.boards if board.name == arguments.clock)
        on_it = [joint for joint in robot.joints if joint.board == board.name]
        chosen = [joint for joint in on_it if joint.name in joints]
        if not chosen:
            raise CommandError(
                f"board {board.name} drives none of these joints: its clock can be seen only where a joint "
                f"pulses; it has {', '.join(joint.name for joint in on_it) or 'none'}"
            )
        return clock_session(board, chosen[0], start.joints_rad[chosen[0].name])
    return session(
        robot,
        ledger.configured,
        joints,
        start.joints_rad,
        steps=[name for name in STEP_NAMES if name in arguments.step or not arguments.step],
        started_at=start.words,
        notes=notes(ledger),
        teeth=arguments.teeth,
        margin_us=arguments.margin_us,
        map_points=arguments.points,
    )


def refuse_other_services(robot: Robot, socket_path: Path) -> None:
    """Several services may run on one computer; none may hold this robot.

    Raises ServiceError, OSError where that cannot be found out.
    """
    from hobnail.service.client import Client
    from hobnail.service.socket_file import NAME, SYSTEM_PATH, answers

    places = {SYSTEM_PATH, *Path("/run").glob(f"hobnail*/{NAME}")} - {socket_path}
    for path in sorted(places):
        if not answers(path):
            continue
        with Client(path) as client:
            held = client.state().get("robot")
        if held == robot.name:
            raise ServiceError(
                f"a service drives {robot.name} already, on {path}: end it first, with `systemctl stop`"
            )
