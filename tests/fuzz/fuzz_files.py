"""Fuzz of configuration, calibration and route files: good files, damaged at random, until something breaks.

    PYTHONPATH=runtime:drivers:tests python tests/fuzz/fuzz_files.py --count 1000000 --seed 1

The outcome of each input must be one of two.  The file is accepted: then a controller can
be built of the robot, and it walks a little in every gait with all pulses within their
limits.  Or it is refused, with problems that a person can read and find.  Anything else, and
an input that takes longer than `--hang-s` of processor time, is a finding: it is
printed, and the input kept in the folder `--keep`.  Input number k depends on seed and
k alone: `--first k --count 1` runs it again.  Exit code 1 when there were findings.
"""

from __future__ import annotations

import argparse
import re
import signal
import sys
import tempfile
import time
import traceback
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from random import Random
from types import FrameType

if __name__ == "__main__":
    sys.path[:0] = [str(Path(__file__).parents[1])]

from fuzz.mutation import Source, mutated
from hobnail.config import load_robot
from hobnail.config.calibration import (
    BoardCalibration,
    Calibration,
    Change,
    JointCalibration,
    WalkCalibration,
    interpret,
    render,
)
from hobnail.config.strict_yaml import Report
from hobnail.controller import Controller, Tick
from hobnail.errors import CalibrationError, ConfigError, Problem, RouteError
from hobnail.robot import Robot, Safety
from hobnail.service.route_file import load_route, steps_from_json, steps_to_json

ROOT = Path(__file__).parents[2]
CONFIGS = (
    *(ROOT / "config" / name for name in ("juniper.yaml", "bramble.yaml")),
    *(ROOT / "tests" / "corpus" / name for name in ("sorrel.yaml", "burdock.yaml")),
)
ROUTES = tuple(sorted((ROOT / "config" / "routes").glob("*.yaml")))
KINDS = ("configuration", "calibration", "route")
LONGEST_MESSAGE = 1200
TICKS = 4  # of the period, and as many long ones, with each gait

# A robot with keys that the shipped ones leave out.
EXTRAS = """\
  - name: own
    duty: 0.7
    phases: [0, 0.5, 0.5, 0]
    cycle_s: 0.8
    body_shift: 0.5
    swing:
      - {time: 0, travel: 0, lift: 0}
      - {time: 0.4, travel: 0.5, lift: 1}
      - {time: 1, travel: 1, lift: 0}
"""


class WrongError(Exception):
    """An outcome that must not be."""


class HangError(BaseException):
    """An input that takes too long; no handler for errors may catch it."""


@dataclass
class Tally:
    """What came of the inputs so far."""

    outcomes: Counter[tuple[str, str]] = field(default_factory=Counter)
    findings: dict[str, int] = field(default_factory=dict)  # where it broke -> first input
    walked: int = 0
    slowest_s: float = 0.0
    slowest: int = 0

    def table(self) -> str:
        """As lines of text."""
        kinds = [f"{kind:14} {outcome:9} {n:9}" for (kind, outcome), n in sorted(self.outcomes.items())]
        return "\n".join(
            (
                *kinds,
                f"robots walked  {self.walked:19}",
                f"slowest input  {self.slowest:9}: {self.slowest_s:.2f} s of processor time",
                f"findings       {len(self.findings):19}",
            )
        )


class FileFuzz:
    """The good files, and the judge of the damaged ones; `folder` is for its own files."""

    def __init__(
        self, folder: Path, seed: int, *, hang_s: float = 0.0, keep: Path | None = None, walk_one_in: int = 1
    ) -> None:
        self._seed = seed
        self._hang_s = hang_s
        self._walk_one_in = walk_one_in
        self._accepted = 0
        self._keep = keep
        self._robots = [load_robot(path) for path in CONFIGS]
        configs = [Source(path.stem, path.read_text()) for path in CONFIGS]
        text = configs[0].text
        at = text.index("\n# Commands outside")
        configs.append(Source("own gait", text[:at] + EXTRAS + text[at:]))
        calibrations = [Source(robot.name, render(measured(robot))) for robot in self._robots]
        routes = [Source(path.stem, path.read_text()) for path in ROUTES]
        self._sources = {"configuration": configs, "calibration": calibrations, "route": routes}
        self._judges: dict[str, Callable[[bytes, int, Random], bool]] = {
            "configuration": self._configuration,
            "calibration": self._calibration,
            "route": self._route,
        }
        self._config = folder / "fuzzed.yaml"
        self._routes = folder / "route.yaml"
        self._calibrated = []
        for robot, path in zip(self._robots, CONFIGS, strict=True):
            copy = folder / f"{robot.name}.yaml"
            copy.write_bytes(path.read_bytes())
            self._calibrated.append(copy)
        self._seen: set[int] = set()
        self.tally = Tally()

    def input(self, number: int) -> tuple[str, int, bytes, Random]:
        """The kind of input `number`, the number of its good file, its bytes and the dice for its walk."""
        random = Random(f"{self._seed}:{number}")
        kind = random.choices(KINDS, (5, 2, 3))[0]
        sources = self._sources[kind]
        index = random.randrange(len(sources))
        return kind, index, mutated(sources[index], sources, random), random

    def run(self, number: int) -> None:
        """Try one input."""
        kind, index, data, random = self.input(number)
        start = time.process_time()
        if self._hang_s:
            signal.setitimer(signal.ITIMER_VIRTUAL, self._hang_s)
        try:
            accepted = self._judges[kind](data, index, random)
        except Exception as error:  # noqa: BLE001 - whatever it is, it is what is looked for
            self._found(number, data, error)
        except HangError as error:
            self._found(number, data, error)
        else:
            self.tally.outcomes[kind, "accepted" if accepted else "refused"] += 1
        finally:
            signal.setitimer(signal.ITIMER_VIRTUAL, 0.0)
        used_s = time.process_time() - start
        if used_s > self.tally.slowest_s:
            self.tally.slowest_s, self.tally.slowest = used_s, number

    def _found(self, number: int, data: bytes, error: BaseException) -> None:
        at = traceback.extract_tb(error.__traceback__)[-1]
        label = f"{type(error).__name__} at {Path(at.filename).name}:{at.lineno}"
        if isinstance(error, WrongError):
            label = re.sub(r"[-0-9.]+", "#", str(error))[:100]
        if label in self.tally.findings:
            return
        self.tally.findings[label] = number
        print(f"-- input {number}: {label}", *traceback.format_exception(error)[-4:], sep="\n", flush=True)
        if self._keep:
            self._keep.mkdir(parents=True, exist_ok=True)
            (self._keep / f"{self._seed}-{number}.yaml").write_bytes(data)

    # ---- judges: True when accepted, False when refused as it should be

    def _configuration(self, data: bytes, _: int, random: Random) -> bool:
        self._config.write_bytes(data)
        try:
            robot = load_robot(self._config)
        except ConfigError as error:
            check_problems(error.problems, self._config, data)
            return False
        self._walk(robot, random)
        return True

    def _calibration(self, data: bytes, index: int, random: Random) -> bool:
        config = self._calibrated[index]
        path = config.with_suffix(".calibration.yaml")
        report = Report(str(path))
        calibration = interpret(data, self._robots[index], report)
        if calibration is None:
            check_problems(report.problems(), path, data)
            return False
        if interpret(render(calibration).encode(), self._robots[index], report) is None:
            raise WrongError(f"not read back as it is written: {report.problems()[0]}")
        path.write_bytes(data)
        try:
            robot = load_robot(config)
        except CalibrationError as error:
            raise WrongError(f"by itself the calibration is good, but: {error}") from error
        except ConfigError as error:  # good by itself, but the robot cannot stand any more
            check_problems(error.problems, config, config.read_bytes())
            return False
        finally:
            path.unlink()
        self._walk(robot, random)
        return True

    def _route(self, data: bytes, _: int, random: Random) -> bool:
        self._routes.write_bytes(data)
        robot = random.choice((None, *self._robots))
        try:
            steps = load_route(self._routes, robot)
        except RouteError as error:
            check_problems(error.problems, self._routes, data)
            return False
        if len(steps_from_json(steps_to_json(steps), robot)) != len(steps):
            raise WrongError("steps lost on the way to the service")
        return True

    def _walk(self, robot: Robot, random: Random) -> None:
        """Walk a robot, if none like it has walked before, and it is its turn."""
        like = hash(replace(robot, name="", source="", digest="", boards=(), safety=Safety()))
        if like in self._seen:
            return
        self._seen.add(like)
        self._accepted += 1
        if self._accepted % self._walk_one_in == 0:
            self.tally.walked += 1
            walk_a_little(robot, random)


def measured(robot: Robot) -> Calibration:
    """A calibration of a robot, with something of everything."""
    joints = {
        joint.name: JointCalibration(
            trim_rad=0.01 * (number % 5 - 2),
            direction=joint.direction if number % 2 else None,
            pulse_map=joint.pulse_map if number % 3 else None,
            pulse_limits_us=joint.pulse_limits_us if number % 4 else None,
        )
        for number, joint in enumerate(robot.joints)
    }
    boards = {board.name: BoardCalibration(oscillator_hz=25.3e6) for board in robot.boards}
    history = tuple(
        Change(when=f"2026-03-0{day}T14:30:00Z", who="bench", what="a.roll trim_deg", old="0", new="-1.2")
        for day in range(1, 4)
    )
    walk = WalkCalibration(ahead=(0.94, 0.012, -0.03), sideways=(0.02, 1.05, 0.1), turn=0.97)
    return Calibration(robot=robot.name, joints=joints, boards=boards, walk=walk, history=history)


def check_problems(problems: Sequence[Problem], file: Path, data: bytes) -> None:
    """The problems of a refused file: there are any, a person can read them and find their places."""
    if not problems:
        raise WrongError("refused without a problem")
    lines = re.split(rb"\r\n|\r|\n", data)
    widths = [0, *(len(line) for line in lines)]
    for problem in problems:
        message = str(problem)
        where = (problem.line, problem.column)
        for right, what in (
            (problem.file == str(file), f"problem of another file, {problem.file}"),
            (problem.found and problem.allowed, "nothing said of what was found or is allowed"),
            (message.isprintable(), "message not printable"),
            (len(message) <= LONGEST_MESSAGE, f"message of {len(message)} characters"),
            (where == (0, 0) or min(where) >= 1, f"place {where}"),
            (problem.line or not problem.key_path, f"no line for {problem.key_path}"),
            (problem.line < len(widths), f"line {problem.line} of {len(lines)}"),
            (
                problem.column <= widths[problem.line % len(widths)] + 1,
                f"column {problem.column}",
            ),
        ):
            if not right:
                raise WrongError(f"{what}: {message!r}")


def walk_a_little(robot: Robot, random: Random) -> None:
    """Walk some ticks of every gait, lie down, rise; raises WrongError for a pulse out of its limits."""
    controller = Controller(robot, at_rest=random.random() < 0.3)
    limits = robot.envelope
    controller.rise()
    for gait in robot.gaits:
        controller.gait(gait.name)
        vx, vy, yaw_rate = (random.choice((-1.0, 0.0, random.uniform(-1.5, 1.5), 1.0)) for _ in range(3))
        pivot = (random.uniform(-1.0, 1.0), random.uniform(-1.0, 1.0))
        controller.walk(
            vx * limits.forward_m_s, vy * limits.sideways_m_s, yaw_rate * limits.turn_rad_s, pivot
        )
        _tick(controller, robot.period_s)
        _tick(controller, 0.25)
        controller.stand()
        _tick(controller, 1.0)
    controller.lower(random.choice((None, 0.5)))
    _tick(controller, 0.5)


def _tick(controller: Controller, dt_s: float) -> None:
    for _ in range(TICKS):
        check_pulses(controller.robot, controller.tick(dt_s))


def check_pulses(robot: Robot, tick: Tick) -> None:
    """Every pulse within its joint's hard limits (nan is not)."""
    for joint, pulse in zip(robot.joints, tick.pulses_us, strict=True):
        low, high = joint.pulse_limits_us
        if not low <= pulse <= high:
            raise WrongError(f"{joint.name} gets a pulse of {pulse} us, beyond {low} to {high}")


def _hang(_signal: int, _frame: FrameType | None) -> None:
    raise HangError("too long")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line."""
    parser = argparse.ArgumentParser(description="Fuzz configuration, calibration and route files.")
    parser.add_argument("--count", type=int, default=10_000, help="inputs to try")
    parser.add_argument("--first", type=int, default=0, help="number of the first")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--time-limit-s", type=float, default=0.0, help="stop after that time; 0: never")
    parser.add_argument("--hang-s", type=float, default=20.0, help="most processor time for one input")
    parser.add_argument(
        "--walk-one-in", type=int, default=1, metavar="N", help="let every N-th accepted robot walk"
    )
    parser.add_argument("--keep", type=Path, default=None, help="folder for inputs that were findings")
    options = parser.parse_args(arguments)
    signal.signal(signal.SIGVTALRM, _hang)
    end = time.monotonic() + (options.time_limit_s or float("inf"))
    with tempfile.TemporaryDirectory(prefix="fuzz-files-") as folder:
        fuzz = FileFuzz(
            Path(folder),
            options.seed,
            hang_s=options.hang_s,
            keep=options.keep,
            walk_one_in=options.walk_one_in,
        )
        for number in range(options.first, options.first + options.count):
            if time.monotonic() > end:
                print(f"stopped before input {number}: time is up")
                break
            fuzz.run(number)
            done = number - options.first + 1
            if done % max(options.count // 20, 1) == 0:
                print(f"{done} of {options.count} inputs, {len(fuzz.tally.findings)} findings", flush=True)
    print(fuzz.tally.table())
    for label, number in fuzz.tally.findings.items():
        print(f"input {number}: {label}")
    return 1 if fuzz.tally.findings else 0


if __name__ == "__main__":
    sys.exit(main())
