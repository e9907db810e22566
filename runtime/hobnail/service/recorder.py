"""The last minute of pulses, in a file mapped into memory that outlives the process; us, rad, s.

Put it on a tmpfs (the service's runtime directory): then no row waits for a
disk.  Fixed rows with a number and a checksum, so that after a crash, or a cut
anywhere, every whole row can be read.  Only ticks with pulses are kept: what
came before a stop is still there hours after it.  Log lines are not written
here (`hobnail.service.writer`).
"""

from __future__ import annotations

import contextlib
import json
import math
import mmap
import os
import struct
import time
import zlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from hobnail.errors import ServiceError
from hobnail.robot import Robot
from hobnail.service.faults import KINDS
from hobnail.service.states import Command, Frame, State

RING_NAME = "last-minute.ring"
PREVIOUS_NAME = "last-minute.previous.ring"
KEPT_S = 60.0
MAGIC = b"hobnail\x01"
HEADER_BYTES = 4096
_HEADER = struct.Struct("<8sII")  # magic, length and CRC-32 of the JSON text that follows
_NUMBERS = 12  # lateness, command 3, velocity 3, pose 3, slowdown, supply
_CRC = struct.Struct("<I")
_NUMBER = struct.Struct("<Q")  # what every row begins with
_STATES = tuple(State)
_FAULTS = tuple(KINDS)


@dataclass(frozen=True, slots=True)
class Row:
    """One tick: what was asked, what was sent.  `time_s` is monotonic; NaN: no signal."""

    number: int
    time_s: float
    dt_s: float
    state: State
    faults: tuple[str, ...]
    lateness_us: float
    command: tuple[float, float, float]  # vx, vy m/s, yaw rate rad/s; as asked
    velocity: tuple[float, float, float]  # as done
    pose: tuple[float, float, float]  # odometry x, y m, yaw rad
    slowdown: float
    supply_v: float
    pulses_us: tuple[float, ...]
    joints_rad: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Ring:
    """A ring file as read: its header and every whole row, oldest first.

    `header` has robot, digest, source, period_s, joints (names), run (the same
    as in the log), log_dir (empty: beside it), rows (places for them) and `wall_offset_s`, which added to a
    row's time gave seconds since 1970 when the run began.  `damaged` counts
    rows that were begun and are not whole: where the writer is alive, one may be
    the newest.  `missing_bytes` are cut off the end.
    """

    header: dict[str, Any]
    rows: tuple[Row, ...]
    damaged: int
    missing_bytes: int


class Recorder:
    """Writes the ring; `row` costs some microseconds and touches no file.

    `was_interrupted`: the ring before this one, kept as the previous one, does not end at rest.
    """

    def __init__(self, directory: Path, robot: Robot, run: str = "", log_dir: Path | None = None) -> None:
        """Start a new ring; one with rows in it is kept as the previous one.  `run` names
        this life of the service in ring and log alike; the log is in `log_dir`, None: beside the ring.

        Raises OSError when there is no room, or no right to write there.
        """
        path = directory / RING_NAME
        last = last_state(path)
        # Killed or crashed: the robot was not even at rest when its last row was written.
        self.was_interrupted = last not in (None, State.RESTING)
        if last is not None:
            path.replace(directory / PREVIOUS_NAME)
        joints = len(robot.joints)
        self._row = _row_struct(joints)
        self._row_bytes = self._row.size + _CRC.size
        self._rows = max(1, round(KEPT_S / robot.period_s))
        self._fault_bits = {name: 1 << bit for bit, name in enumerate(_FAULTS)}
        self._state_index = {state: index for index, state in enumerate(_STATES)}
        self.number = 0
        size = HEADER_BYTES + self._rows * self._row_bytes
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o640)
        try:
            os.posix_fallocate(descriptor, 0, size)  # a full tmpfs shows here, not as a crash later
            self._map = mmap.mmap(descriptor, size)
        finally:
            os.close(descriptor)
        for page in range(0, size, mmap.PAGESIZE):
            self._map[page] = 0
        text = json.dumps(
            {
                "robot": robot.name,
                "digest": robot.digest,
                "source": robot.source,
                "period_s": robot.period_s,
                "run": run,
                "rows": self._rows,
                "log_dir": str(log_dir.absolute()) if log_dir else "",
                "joints": [joint.name for joint in robot.joints],
                "wall_offset_s": time.time() - time.monotonic(),
                "states": [str(state) for state in _STATES],
                "faults": list(_FAULTS),
            }
        ).encode()
        if _HEADER.size + len(text) > HEADER_BYTES:
            raise ServiceError("the names of robot, joints and file are too long for the recorder's header")
        self._map[: _HEADER.size] = _HEADER.pack(MAGIC, len(text), zlib.crc32(text))
        self._map[_HEADER.size : _HEADER.size + len(text)] = text

    def row(
        self,
        frame: Frame,
        now_s: float,
        dt_s: float,
        lateness_s: float,
        command: Command | None,
        supply_v: float,
        faults: Iterable[str],
    ) -> None:
        """Keep one tick."""
        tick = frame.tick
        velocity = tick.velocity if tick else (0.0, 0.0, 0.0)
        pose = tick.pose if tick else (0.0, 0.0, 0.0)
        bits = 0
        for name in faults:
            bits |= self._fault_bits[name]
        nan = math.nan
        self.number += 1
        row = self._row.pack(
            self.number,
            now_s,
            dt_s,
            bits,
            self._state_index[frame.state],
            lateness_s * 1e6,
            *((command.vx, command.vy, command.yaw_rate) if command else (0.0, 0.0, 0.0)),
            *velocity,
            *pose,
            tick.slowdown if tick else 1.0,
            supply_v,
            *[nan if pulse is None else pulse for pulse in frame.pulses_us],
            *[nan if angle is None else angle for angle in frame.joints_rad],
        )
        start = HEADER_BYTES + (self.number - 1) % self._rows * self._row_bytes
        self._map[start : start + self._row_bytes] = row + _CRC.pack(zlib.crc32(row))

    def close(self) -> None:
        """Let go of the file; it stays.  May be called twice."""
        self._map.close()


def read_ring(path: Path) -> Ring:
    """Every whole row of a ring file, however it was cut or damaged.

    Raises OSError when it cannot be read, ServiceError when not even its header is whole.
    """
    data = path.read_bytes()
    header, joints = _read_header(data, path)
    form = _row_struct(joints)
    rows = []
    for start in _whole_rows(data, form):
        with contextlib.suppress(IndexError, ValueError):  # a state that neither the header nor we know
            rows.append(_unpacked(form.unpack_from(data, start), joints, header["states"], header["faults"]))
    step = form.size + _CRC.size
    places = range(HEADER_BYTES, len(data) - step + 1, step)
    begun = sum(1 for start in places if any(data[start : start + step]))
    whole = HEADER_BYTES + step * max(header["rows"], begun)
    return Ring(header, tuple(rows), begun - len(rows), max(0, whole - len(data)))


def last_posture(directory: Path, robot: Robot) -> tuple[float, ...] | None:
    """Where the joints of this very configuration were last commanded to, rad; None when not known."""
    for name in (RING_NAME, PREVIOUS_NAME):
        path = directory / name
        try:
            data = path.read_bytes()
            header, joints = _read_header(data, path)
        except (OSError, ServiceError):
            continue
        if header.get("digest") != robot.digest or joints != len(robot.joints):
            continue
        posture = _newest_angles(data, joints)
        if posture is not None:
            return posture
    return None


def last_state(path: Path) -> State | None:
    """The state in the newest row of a ring file; None when there is no ring, or no row in it."""
    try:
        data = path.read_bytes()
        _, joints = _read_header(data, path)
    except (OSError, ServiceError):
        return None
    form = _row_struct(joints)
    starts = _whole_rows(data, form)
    return _unpacked(form.unpack_from(data, starts[-1]), joints).state if starts else None


def _newest_angles(data: bytes, joints: int) -> tuple[float, ...] | None:
    """The newest commanded angle of each joint; while joints wake, some are in older rows only."""
    form = _row_struct(joints)
    posture = (math.nan,) * joints
    for start in reversed(_whole_rows(data, form)):
        angles = form.unpack_from(data, start)[-joints:]
        posture = tuple(old if math.isfinite(old) else new for old, new in zip(posture, angles, strict=True))
        if all(map(math.isfinite, posture)):
            return posture
    return None


def _whole_rows(data: bytes, form: struct.Struct) -> list[int]:
    """Where the rows with a right checksum begin, oldest first."""
    size = form.size
    found = []
    for start in range(HEADER_BYTES, len(data) - size - _CRC.size + 1, size + _CRC.size):
        number = _NUMBER.unpack_from(data, start)[0]
        # Rows count from 1: a row of zeros was never written.
        if number and _CRC.unpack_from(data, start + size)[0] == zlib.crc32(data[start : start + size]):
            found.append((number, start))
    return [start for _, start in sorted(found)]


def _row_struct(joints: int) -> struct.Struct:
    return struct.Struct(f"<QddIB3x{_NUMBERS + 2 * joints}f")


def _read_header(data: bytes, path: Path) -> tuple[dict[str, Any], int]:
    """The header, and the number of joints in it."""
    problem = ServiceError(
        f"{path}: not a recording of hobnail, or its first {HEADER_BYTES} bytes are damaged"
    )
    if len(data) < HEADER_BYTES:
        raise problem
    magic, length, checksum = _HEADER.unpack_from(data)
    text = data[_HEADER.size : _HEADER.size + length]
    if magic != MAGIC or zlib.crc32(text) != checksum:
        raise problem
    try:
        header = {"run": "", "rows": 0, "log_dir": "", **json.loads(text)}
        fits = (
            all(isinstance(header[key], str) for key in ("robot", "digest", "source", "run", "log_dir"))
            and all(isinstance(name, str) for key in ("joints", "states", "faults") for name in header[key])
            and all(math.isfinite(header[key]) for key in ("period_s", "wall_offset_s", "rows"))
            and header["period_s"] > 0.0
        )
    except (ValueError, TypeError, KeyError, RecursionError):
        fits = False
    if not fits:
        raise problem
    return header, len(header["joints"])


def _unpacked(
    values: tuple[Any, ...],
    joints: int,
    states: Sequence[str] = _STATES,
    faults: Sequence[str] = _FAULTS,
) -> Row:
    """A row; `states` and `faults` are those of the program that wrote it."""
    number, time_s, dt_s, bits, state, *numbers = values
    return Row(
        number=number,
        time_s=time_s,
        dt_s=dt_s,
        state=State(states[state]),
        faults=tuple(name for bit, name in enumerate(faults) if bits >> bit & 1),
        lateness_us=numbers[0],
        command=tuple(numbers[1:4]),
        velocity=tuple(numbers[4:7]),
        pose=tuple(numbers[7:10]),
        slowdown=numbers[10],
        supply_v=numbers[11],
        pulses_us=tuple(numbers[12 : 12 + joints]),
        joints_rad=tuple(numbers[12 + joints :]),
    )
