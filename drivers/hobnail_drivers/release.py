"""`hobnail-release`: ends every pulse on every board, with no configuration and whatever has happened before.

Meant to be run by the service manager after every end of the service, crash and
kill included: a PWM chip goes on by itself when its program dies.  Uses only
what Python starts with, for it has to be quick.  Each bus is tried by a process
of its own, so that one that hangs holds up neither the others nor the end.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Sequence

from hobnail_drivers import board_notes
from hobnail_drivers import registers as r

EX_OK = 0
EX_USAGE = 64
EX_UNAVAILABLE = 69
EX_NOPERM = 77

I2C_SLAVE_FORCE = 0x0706  # linux/i2c-dev.h: even if a kernel driver holds the address
I2C_SMBUS = 0x0720
I2C_SMBUS_BYTE_DATA = 2

SIGKILL = 9  # importing `signal` takes longer than all the rest

TRIES = 3
TIMEOUT_S = 2.0
DEFAULT_BUS = 1

Where = tuple[str, str]  # ("i2c", bus) or ("model", path)
Places = dict[Where, list[str]]  # addresses, or names of boards


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command; returns its exit code: 0 when every board has heard, else as in sysexits."""
    arguments = sys.argv[1:] if argv is None else list(argv)
    timeout_s = TIMEOUT_S
    try:
        if arguments:
            places, timeout_s = _from_arguments(arguments)
        else:
            places = _from_note(board_notes.default_path())
    except OSError as error:
        print(f"hobnail-release: note of the boards: {error}: give --bus and --address", file=sys.stderr)
        return EX_NOPERM if isinstance(error, PermissionError) else EX_UNAVAILABLE
    except SystemExit as end:  # argparse has told; its own code for wrong usage is 2
        return EX_USAGE if end.code else EX_OK
    if not places:
        print("hobnail-release: no board is noted, nothing to release")
    return _report(places, _end_all(places, timeout_s), timeout_s)


def _from_arguments(arguments: list[str]) -> tuple[Places, float]:
    import argparse

    def number(text: str) -> int:
        return int(text, 0)

    parser = argparse.ArgumentParser(
        prog="hobnail-release",
        description="End every pulse on every PWM board.  Without options: on the boards that the service "
        "noted, else on all boards of bus 1 that answer to the all-call or the default address.",
    )
    parser.add_argument("--bus", type=number, action="append", help="I2C bus number; may be given again")
    parser.add_argument("--address", type=number, action="append", help="board address; may be given again")
    parser.add_argument("--model", metavar="FILE", help="a chip model file, instead of a bus")
    parser.add_argument("--note", metavar="FILE", help="where the service noted its boards")
    parser.add_argument(
        "--timeout", type=float, default=TIMEOUT_S, help="seconds for all (default %(default)g)"
    )
    given = parser.parse_args(arguments)
    if not 0.0 < given.timeout < 3600.0:
        parser.error(f"--timeout is {given.timeout} s; allowed is more than 0 up to 3600 s")
    for address in given.address or ():
        if not 0x03 <= address <= 0x77:
            parser.error(f"--address is 0x{address:x}; allowed is 0x03 to 0x77")
    for bus in given.bus or ():
        if bus < 0:
            parser.error(f"--bus is {bus}; allowed is 0 and up")
    if given.model and (given.bus or given.address or given.note):
        parser.error("--model goes alone: a model file names its own boards")
    if given.model:
        return {("model", given.model): []}, given.timeout
    if given.bus or given.address:
        addresses = [f"0x{address:02x}" for address in given.address or ()]
        return {("i2c", str(bus)): list(addresses) for bus in given.bus or [DEFAULT_BUS]}, given.timeout
    return _from_note(given.note or board_notes.default_path()), given.timeout


def _from_note(path: str) -> Places:
    """The boards of a note; without one, or where it cannot be read, whatever answers on the default bus."""
    try:
        with open(path, encoding="utf-8", errors="replace") as file:
            lines = file.read().splitlines()
    except FileNotFoundError:
        return {("i2c", str(DEFAULT_BUS)): []}
    places: Places = {}
    for line in lines:
        kind, where, board = (*line.split(" ", 2), "", "", "")[:3]
        if board and (kind == "model" or (kind == "i2c" and where.isdecimal() and _is_address(board))):
            places.setdefault((kind, where), []).append(board)
        else:
            print(f"hobnail-release: {path}: cannot read {line!r}, trying the default bus", file=sys.stderr)
            places.setdefault(("i2c", str(DEFAULT_BUS)), [])
    return places


def _is_address(text: str) -> bool:
    try:
        return 0x03 <= int(text, 0) <= 0x77
    except ValueError:
        return False


def _end_all(places: Places, timeout_s: float) -> dict[Where, list[tuple[str, int]]]:
    """What came of it at each place: (board, errno or 0) each, as far as it was known in time."""
    import select
    import time

    deadline_s = time.monotonic() + timeout_s
    running: dict[int, tuple[Where, int, bytearray]] = {}
    for where, boards in places.items():
        reader, writer = os.pipe()
        child = os.fork()
        if child == 0:
            try:
                _end_place(where, boards, writer)
            finally:
                os._exit(0)
        os.close(writer)
        running[reader] = (where, child, bytearray())
    texts = {where: text for where, _, text in running.values()}
    while running and (left_s := deadline_s - time.monotonic()) > 0.0:
        for reader in select.select(list(running), (), (), left_s)[0]:
            got = os.read(reader, 4096)
            running[reader][2].extend(got)
            if not got:
                _, child, _ = running.pop(reader)
                os.waitpid(child, 0)
    for _, child, _ in running.values():
        os.kill(child, SIGKILL)
    results: dict[Where, list[tuple[str, int]]] = {}
    for where, text in texts.items():
        lines = (line.partition(" ") for line in text.decode().splitlines())
        results[where] = [(board, int(errno)) for errno, _, board in lines]
    return results


def _end_place(where: Where, boards: list[str], writer: int) -> None:
    """In a process of its own: end the pulses of the boards of one bus or file, a line each to `writer`."""
    kind, place = where

    def tell(board: str, number: int) -> None:
        os.write(writer, f"{number} {board}\n".encode())

    try:
        if kind == "model":
            _end_in_model(place, boards, tell)
        else:
            _end_on_bus(int(place), boards, tell)
    except (OSError, ValueError) as error:
        for board in boards or [""]:
            tell(board, getattr(error, "errno", None) or 22)  # EINVAL


def _end_on_bus(bus: int, addresses: list[str], tell: Callable[[str, int], None]) -> None:
    """The boards at those addresses; when none are given, those that hear all-call or sit at the default."""
    device = os.open(f"/dev/i2c-{bus}", os.O_RDWR)
    if addresses:
        for address in addresses:
            tell(address, _try_board(device, int(address, 0)))
        return
    tried = [(number, _try_board(device, number)) for number in (r.ALL_CALL_ADDRESS, r.DEFAULT_ADDRESS)]
    for number, error in [(number, error) for number, error in tried if error == 0] or tried:
        tell(f"0x{number:02x}", error)


def _try_board(device: int, address: int) -> int:
    number = 0
    for _ in range(TRIES):
        try:
            _write_all_off(device, address)
        except OSError as error:
            number = error.errno or 5
        else:
            return 0
    return number


def _write_all_off(device: int, address: int) -> None:
    import errno
    import fcntl

    fcntl.ioctl(device, I2C_SLAVE_FORCE, address)
    try:
        os.write(device, r.ALL_OFF)
    except OSError as error:
        if error.errno != errno.EOPNOTSUPP:
            raise
        # An adapter that knows only SMBus: struct i2c_smbus_ioctl_data of linux/i2c-dev.h.
        import array
        import struct

        register, value = r.ALL_OFF
        data = array.array("B", bytes((value,)) + bytes(33))
        request = struct.pack("BBIP", 0, register, I2C_SMBUS_BYTE_DATA, data.buffer_info()[0])
        fcntl.ioctl(device, I2C_SMBUS, request)


def _end_in_model(path: str, names: list[str], tell: Callable[[str, int], None]) -> None:
    from hobnail_drivers.bus_model import BusModel
    from hobnail_drivers.chip_file import open_chip_file
    from hobnail_drivers.pca9685_chip import Chip

    entries = open_chip_file(path)
    for name in names or [entry.name for entry in entries]:
        found = [entry for entry in entries if entry.name == name]
        for entry in found:
            chip = Chip(entry.address, oscillator_hz=entry.oscillator_hz, registers=entry.registers)
            BusModel([chip]).transfer((entry.address, r.ALL_OFF))
        tell(name, 0 if found else 6)  # ENXIO: no such device


def _report(places: Places, results: dict[Where, list[tuple[str, int]]], timeout_s: float) -> int:
    """A line a board, and the exit code."""
    code = EX_OK
    for (kind, place), boards in places.items():
        unit = f"bus {place} address" if kind == "i2c" else f"model {place} board"
        outcomes = results[(kind, place)]
        told = {board for board, _ in outcomes}
        for board, number in outcomes:
            if number == 0:
                print(f"hobnail-release: {unit} {board}: all outputs off")
                continue
            code = EX_NOPERM if number in (1, 13) and code in (EX_OK, EX_NOPERM) else EX_UNAVAILABLE
            print(f"hobnail-release: {unit} {board or '(all)'}: {_advice(kind, number)}", file=sys.stderr)
        for board in [name for name in boards if name not in told] or ([] if outcomes else ["(all)"]):
            code = EX_UNAVAILABLE
            print(
                f"hobnail-release: {unit} {board}: no end within {timeout_s:g} s: cut the servo supply",
                file=sys.stderr,
            )
    return code


def _advice(kind: str, number: int) -> str:
    if kind == "model":
        return f"{os.strerror(number)}: give a chip model file and a board in it"
    from hobnail_drivers.i2c import ADVICE

    return ADVICE.get(number, os.strerror(number))


if __name__ == "__main__":
    sys.exit(main())
