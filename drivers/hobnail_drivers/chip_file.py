"""Registers of modelled chips in a file that processes share, so that they outlive each of them.

Layout: a line of 16 bytes, then 320 bytes a chip: name (48, UTF-8, NUL-padded),
bus and address (4 each), oscillator in Hz (8, a double), all little endian, and
256 registers.  No locking: the bytes are as unguarded as a chip's registers.
"""

from __future__ import annotations

import mmap
import os
import struct
from collections.abc import Iterable
from typing import NamedTuple

from hobnail_drivers.errors import SettingsError
from hobnail_drivers.pca9685_chip import POWER_UP

MAGIC = b"hobnail chips 1\n"
ENTRY = struct.Struct("<48sIId")
REGISTERS = 256
STRIDE = ENTRY.size + REGISTERS


class Entry(NamedTuple):
    """One chip of a file: who it is, and its registers, in shared memory."""

    name: str
    bus: int
    address: int
    oscillator_hz: float
    registers: memoryview


def make_chip_file(path: str, chips: Iterable[tuple[str, int, int, float]]) -> None:
    """Make sure that the file holds exactly these chips: (name, bus, address, oscillator_hz).

    A file that already does is left as it is; else they have all just got power.
    Raises SettingsError (not a chip file, or a name over 48 bytes), OSError.
    """
    wanted = list(chips)
    if os.path.exists(path) and [entry[:4] for entry in open_chip_file(path)] == wanted:
        return
    content = bytearray(MAGIC)
    for name, bus, address, oscillator_hz in wanted:
        encoded = name.encode()
        if len(encoded) > 48:
            raise SettingsError(f"board name {name!r} is {len(encoded)} bytes long; allowed are 48")
        content += ENTRY.pack(encoded, bus, address, oscillator_hz) + POWER_UP
    part = f"{path}.{os.getpid()}"
    with open(part, "wb") as file:
        file.write(content)
    os.replace(part, path)


def open_chip_file(path: str) -> list[Entry]:
    """The chips of a file.  Raises SettingsError when it is none, OSError."""
    with open(path, "r+b") as file:
        size = os.fstat(file.fileno()).st_size
        if size < len(MAGIC) or (size - len(MAGIC)) % STRIDE or file.read(len(MAGIC)) != MAGIC:
            raise SettingsError(f"{path} is not a chip model file: give a path that does not exist yet")
        memory = memoryview(mmap.mmap(file.fileno(), size))
    entries = []
    for start in range(len(MAGIC), size, STRIDE):
        name, bus, address, oscillator_hz = ENTRY.unpack_from(memory, start)
        registers = memory[start + ENTRY.size : start + STRIDE]
        entries.append(Entry(name.rstrip(b"\0").decode(), bus, address, oscillator_hz, registers))
    return entries
