"""The `hobnail` command: finds the command asked for, and turns every end into an exit code.

A command is a module of this package with `configure(parser)` and
`run(arguments) -> exit code`.  Only the module asked for is imported, so that
`hobnail stop` needs no numpy and starts fast.  Exit codes are those of
sysexits (`hobnail.errors`), 130 after Ctrl-C, 141 when the reader of a pipe has gone.
"""

from __future__ import annotations

import difflib
import os
import sys
import traceback
from collections.abc import Sequence
from importlib import import_module
from types import ModuleType

from hobnail.cli.options import Parser
from hobnail.errors import EX_NOINPUT, EX_NOPERM, EX_SOFTWARE, EX_USAGE, HobnailError

EX_INTERRUPTED = 130
EX_PIPE = 141

# name -> what it does; the module has the same name.
COMMANDS = {
    "check": "tell whether a configuration is right, and what the robot can do",
    "calibrate": "measure trims, directions, pulse maps, limits and clocks on the bench",
    "trim": "make the robot walk as it is told, from a walk measured with a tape",
    "rehearse": "walk a configuration in a physics engine",
    "run": "be the robot's service: take commands on the socket and drive the servos",
    "state": "print what the running robot is doing",
    "watch": "watch the running robot live",
    "stand": "wake the joints and stand up",
    "walk": "walk with a velocity until Ctrl-C, then stand",
    "route": "walk a route file",
    "gait": "change the gait",
    "posture": "move the body over its standing feet",
    "rest": "lie down, pulses on",
    "off": "lie down, then end the pulses",
    "stop": "emergency stop; latches",
    "reset": "unlatch a stop; moves nothing",
    "log": "explain afterwards: what was asked, what was sent, what went wrong",
    "doctor": "look the machine over: what keeps the robot from working, and what to do",
}


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command; never raises, never shows a traceback unless HOBNAIL_DEBUG=1."""
    words = list(sys.argv[1:] if argv is None else argv)
    try:
        code = _dispatch(words)
        sys.stdout.flush()
    except SystemExit as stop:  # argparse: help asked for, or wrong usage
        return stop.code if isinstance(stop.code, int) else 0
    except KeyboardInterrupt:
        return EX_INTERRUPTED
    except BrokenPipeError:
        # Python flushes stdout once more at exit; give it somewhere to go.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return EX_PIPE
    except HobnailError as error:
        _complain(str(error))
        return error.exit_code
    except OSError as error:
        # Files and devices: the system's own words are what helps here.
        _complain(f"{error.filename}: {error.strerror}" if error.filename else str(error))
        return EX_NOPERM if isinstance(error, PermissionError) else EX_NOINPUT
    except Exception as error:  # noqa: BLE001  the last resort: one line instead of a traceback
        _complain(
            f"internal error: {type(error).__name__}: {error}; this is a bug in hobnail: report this line "
            "and the command you gave (HOBNAIL_DEBUG=1 shows where)"
        )
        if os.environ.get("HOBNAIL_DEBUG") == "1":
            traceback.print_exc()
        return EX_SOFTWARE
    return code


def command(name: str) -> tuple[ModuleType, Parser]:
    """The module of a command and its parser, ready to parse."""
    module = import_module(f"hobnail.cli.{name}")
    parser = Parser(prog=f"hobnail {name}", description=f"{COMMANDS[name][0].upper()}{COMMANDS[name][1:]}.")
    module.configure(parser)
    return module, parser


def _dispatch(words: list[str]) -> int:
    if not words or words[0] in ("-h", "--help", "help"):
        if words[1:] and words[1] in COMMANDS:
            words = [words[1], "--help"]
        else:
            print(_overview())
            return 0 if words else EX_USAGE
    if words[0] == "--version":
        from importlib.metadata import PackageNotFoundError, version

        try:
            print(f"hobnail {version('hobnail')}")
        except PackageNotFoundError:  # run from the source tree
            print("hobnail (not installed, version unknown)")
        return 0
    name = words[0]
    if name not in COMMANDS:
        near = difflib.get_close_matches(name, COMMANDS, n=1)
        hint = f"did you mean {near[0]!r}?" if near else "`hobnail --help` lists them"
        _complain(f"there is no command {name!r}; {hint}")
        return EX_USAGE
    module, parser = command(name)
    code = module.run(parser.parse_args(words[1:]))
    return int(code)


def _overview() -> str:
    lines = ["usage: hobnail COMMAND [OPTIONS]", "", "Walks servo-driven legged robots.", "", "commands:"]
    lines += [f"  {name:<10} {text}" for name, text in COMMANDS.items()]
    lines += ["", "`hobnail COMMAND --help` tells more, with examples."]
    lines += ["Without a robot: hobnail run config/juniper.yaml --route config/routes/bench-round.yaml"]
    return "\n".join(lines)


def _complain(text: str) -> None:
    for line in text.splitlines() or [""]:
        print(f"hobnail: {line}", file=sys.stderr)


if __name__ == "__main__":
    sys.exit(main())
