"""Hazards of storage and files: a stalling card, log spam, files that are edited, evidence that is cut."""

from __future__ import annotations

import math
import shutil
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path
from threading import Event
from unittest import mock

from campaign.acts import end, expect_fault, robot_in
from campaign.stepping import PATIENCE_S
from campaign.world import CONFIG, EX_CONFIG, World, brisk, demo
from hobnail.config import load_robot
from hobnail.errors import ConfigError
from hobnail.service.keeper import LOOK_EVERY_S, Keeper
from hobnail.service.recorder import HEADER_BYTES, RING_NAME, Recorder, Row, last_state, read_ring
from hobnail.service.writer import EventLog, Job, Writer

FAILURES, LINES = 10_000, 20  # of the same kind, and how many lines they may make
DAY_S = 86_400.0
KEPT_S = 60.0

# What YAML makes of these in silence: text, octal, true, a number to the base of 60, the last of two.
SURPRISES = {
    "1e3": ("torque_kgf_cm: 20 ", "torque_kgf_cm: 1e3 "),
    "010": ("period_ms: 10 ", "period_ms: 010 "),
    "on": ("duty: 0.6 ", "duty: on "),
    "12:30": ("height_mm: 170 ", "height_mm: 12:30 "),
    "a duplicate": ("name: juniper\n", "name: juniper\nname: juniper\n"),
}
TYPO = ("low_v:", "lov_v:")  # switches the low supply's protection off, if it were not noticed
DAMAGED = "version: 1\nrobot: juniper\njoints:\n  left-front.roll: {trim_deg: 900}\nhistory: []\n"


@contextmanager
def temporary() -> Iterator[Path]:
    """A directory for one scenario."""
    with tempfile.TemporaryDirectory() as directory:
        yield Path(directory)


def card_stalls(state: str) -> str:
    """Whatever writes the log stands still for seven seconds."""
    begun, let_go = Event(), Event()
    lines: list[str] = []

    def card(line: str) -> None:
        begun.set()
        assert let_go.wait(PATIENCE_S)
        lines.append(line)

    writer = Writer("campaign", length=20)
    log = EventLog(writer, None, (card,))
    log.event("test", "the line that takes seven seconds", 0.0)
    assert begun.wait(PATIENCE_S)
    with temporary() as directory, robot_in(state, log=log) as world:
        keeper = Keeper(world.machine, writer, (), directory, None)
        for number in range(100):
            log.event("test", f"line {number}", world.clock.now_s)
        world.run(7.0, lambda: keeper.update(world.clock.now_s))
        # That every tick was on time, to the microsecond, the witness has seen.
        expect_fault(world, "recorder-behind", cause=False)
        assert world.state == _goes_on(state), f"{world.state} seven seconds later, wanted {_goes_on(state)}"
        dropped = writer.dropped
        assert dropped >= 80
        let_go.set()
        while not lines or not lines[-1].startswith("through"):  # as soon as the queue takes lines again
            log.event("test", "through again", world.clock.now_s)
        end(world)
    assert writer.close(PATIENCE_S)
    told = [line for line in lines if "were dropped" in line]
    assert told, "nobody is told of the dropped lines"
    return f"every tick on time; {dropped} lines dropped, counted and told"


def _goes_on(state: str) -> str:
    """Where a robot that is left to itself is, some seconds later."""
    return {"waking": "standing", "rising": "standing", "lowering": "resting", "stopping": "stopped"}.get(
        state, state
    )


def log_spam(state: str) -> str:
    """The same failure ten thousand times."""
    lines: list[str] = []
    writer = Writer("campaign", length=FAILURES)
    with robot_in(state, log=EventLog(writer, None, (lines.append,))) as world:
        per_tick = FAILURES // 200

        def fail() -> None:
            for number in range(per_tick):
                world.machine.report("bus-retried", world.clock.now_s, f"errno 121, transfer {number}")

        world.run(200 * world.robot.period_s, fail)
        assert world.machine.faults.total("bus-retried") == FAILURES
        world.run(0.1)
        end(world)
    assert writer.close(PATIENCE_S)
    spam = [line for line in lines if "bus-retried" in line]
    assert 1 <= len(spam) <= LINES, f"{len(spam)} lines"
    assert any("repeated" in line for line in spam), "nobody is told how often"
    return f"{FAILURES} failures, {len(spam)} lines"


# ---- files that are edited while the robot runs


class _AtOnce(Writer):
    """A writer whose jobs are done when they are given."""

    def __init__(self) -> None:
        self.dropped = 0

    def put(self, job: Job) -> bool:
        job()
        return True


def configuration_typo(state: str) -> str:
    """A key is misspelt on disk while the robot runs."""
    said = refusal("juniper.yaml", *TYPO)
    assert "lov_v" in said, said
    assert "low_v" in said, f"no near match in: {said}"
    told = _edited(state, "juniper.yaml", *TYPO)
    return f"{told}; a restart is refused, exit {EX_CONFIG}, with line and near match"


def yaml_surprises(state: str) -> str:
    """Values that YAML reads otherwise than people, written to disk while the robot runs."""
    for name, edit in SURPRISES.items():
        assert refusal("juniper.yaml", *edit), f"{name} passes in silence"
    told = _edited(state, "juniper.yaml", *SURPRISES["010"])
    return f"{told}; a restart is refused for each of {', '.join(SURPRISES)}"


def calibration_edited(state: str) -> str:
    """The calibration is changed on disk, wrongly at that, while the robot runs."""
    said = refusal("juniper.calibration.yaml", "", DAMAGED)
    assert "left-front.roll" in said and "trim_deg" in said, said  # noqa: PT018
    told = _edited(state, "juniper.calibration.yaml", "", DAMAGED)
    return f"{told}; a restart is refused, naming the joint and what is allowed"


@cache
def refusal(name: str, old: str, new: str) -> str:
    """What the loader says to the edited files; it must name file and line."""
    with temporary() as directory:
        _edit(_copied(directory), name, old, new)
        try:
            load_robot(directory / "juniper.yaml")
        except ConfigError as error:
            refused = error
        else:
            raise AssertionError(f"{name} with {new!r} is taken")
    assert refused.exit_code == EX_CONFIG
    assert f"{name}:" in str(refused), refused
    assert all(problem.line > 0 and problem.allowed for problem in refused.problems), refused
    return str(refused)


def _copied(directory: Path) -> Path:
    shutil.copy(CONFIG / "juniper.yaml", directory)
    return directory


def _edit(directory: Path, name: str, old: str, new: str) -> None:
    path = directory / name
    text = path.read_text() if path.exists() else ""
    assert old in text, f"{name} has no {old!r} to be edited any more"
    path.write_text(text.replace(old, new, 1) if old else new)


def _edited(state: str, name: str, old: str, new: str) -> str:
    """The running robot is told of the edit, and goes on as if nothing had been."""
    with temporary() as directory, robot_in(state) as world:
        _copied(directory)
        sources = (directory / "juniper.yaml", directory / "juniper.calibration.yaml")
        keeper = Keeper(world.machine, _AtOnce(), sources, directory, None)
        _edit(directory, name, old, new)
        world.run(LOOK_EVERY_S + 0.5, lambda: keeper.update(world.clock.now_s))
        expect_fault(world, "configuration-changed", cause=False)
        assert world.state == _goes_on(state), f"{world.state}, wanted {_goes_on(state)}"
        end(world)
    return f"told, not acted upon: goes on {_goes_on(state)}"


# ---- evidence, and the time on it


def wall_clock_jumps(state: str) -> str:
    """The wall clock jumps by a day, there and back."""
    straight = _life(state, 0.0)
    assert _life(state, DAY_S) == straight, "a day ahead changes what is sent"
    assert _life(state, -DAY_S) == straight, "a day back changes what is sent"
    return f"the same {len(straight)} frames to the last bit, a day ahead and a day back"


def _life(state: str, jump_s: float) -> list[tuple[float | None, ...]]:
    """What the pins showed, tick by tick, around a jump."""
    frames: list[tuple[float | None, ...]] = []

    def note(world: World) -> Callable[[], None]:
        return lambda: frames.append(tuple(world.machine.body.pulses_us))

    now = time.time
    with temporary() as directory:
        recorder = Recorder(directory, brisk(demo()))
        with robot_in(state, recorder=recorder) as world:
            world.run(0.3, note(world))
            with mock.patch("time.time", side_effect=lambda: now() + jump_s):
                world.run(0.7, note(world))
                end(world)
        recorder.close()
    return frames


def evidence(state: str) -> str:
    """The program dies, and the file with the last minute is cut at every byte of its last row."""
    with temporary() as directory:
        robot = brisk(demo())
        recorder = Recorder(directory, robot)
        with robot_in(state, robot, recorder=recorder) as world:
            world.run(0.05)
            sent_us = list(world.witness.now_us)
            pulsing = world.witness.pulsing
            data = (directory / RING_NAME).read_bytes()  # as a crash would leave it
            recorded = state if state not in ("stopped", "off") else last_state(directory / RING_NAME)
            end(world)
        recorder.close()
        rows = _rows(directory, data)
        assert rows, "nothing was recorded"
        assert rows[-1].state == recorded
        if pulsing:
            for index, (kept_us, seen_us) in enumerate(zip(rows[-1].pulses_us, sent_us, strict=True)):
                assert math.isnan(kept_us) == (seen_us is None)
                rounding_us = 0.5 * world.witness.count_us(index) + 0.001
                assert seen_us is None or abs(kept_us - seen_us) < rounding_us, (
                    f"{kept_us} kept, {seen_us} sent"
                )
        row_bytes = (len(data) - HEADER_BYTES) // round(KEPT_S / robot.period_s)
        last = len(rows)
        for cut in range(HEADER_BYTES + (last - 1) * row_bytes, HEADER_BYTES + last * row_bytes + 1):
            whole = (cut - HEADER_BYTES) // row_bytes
            assert len(_rows(directory, data[:cut])) == whole, f"cut at byte {cut}"
        damaged = bytearray(data)
        damaged[HEADER_BYTES + last * row_bytes - row_bytes // 2] ^= 1
        assert len(_rows(directory, bytes(damaged))) == last - 1, (
            "a row with a wrong bit in it is taken for whole"
        )
    return f"{last} rows up to {rows[-1].state}; cut at each of {row_bytes} bytes, every whole row is read"


def _rows(directory: Path, data: bytes) -> tuple[Row, ...]:
    path = directory / "cut.ring"
    path.write_bytes(data)
    return read_ring(path).rows
