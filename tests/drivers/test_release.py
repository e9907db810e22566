"""The release helper as a command: on the chip model over processes, and on a stand-in for /dev/i2c-N."""

from __future__ import annotations

import errno
import fcntl
import os
import struct
import subprocess
import sys
from pathlib import Path

import pytest

from hobnail_drivers import board_notes, release
from hobnail_drivers.board_notes import note_boards
from hobnail_drivers.chip_file import make_chip_file, open_chip_file
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.conformance import BOARDS, OUTPUTS, PULSES_US
from hobnail_drivers.errors import SettingsError
from hobnail_drivers.pca9685_chip import Chip

WALKER = """
import sys, time
from hobnail_drivers.board_notes import note_boards
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.conformance import BOARDS, OUTPUTS, PULSES_US
driver = ModelledPca9685Driver(BOARDS, OUTPUTS, argument=sys.argv[1])
note_boards(sys.argv[2], driver.notes())
driver.open()
while True:
    driver.write(PULSES_US)
    print("wrote", flush=True)
    time.sleep(0.01)
"""


def run(*arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "hobnail_drivers.release", *arguments],
        capture_output=True,
        text=True,
        check=False,
        timeout=30,
        env={**os.environ, "HOBNAIL_SOCKET": "", **environment},
    )


def chips(path: Path) -> dict[str, Chip]:
    return {e.name: Chip(e.address, registers=e.registers) for e in open_chip_file(str(path))}


@pytest.fixture
def killed(tmp_path: Path) -> Path:
    """A directory with the chip file and the note of a program that was killed while it pulsed."""
    child = subprocess.Popen(
        [sys.executable, "-c", WALKER, str(tmp_path / "chips"), str(tmp_path / "boards")],
        stdout=subprocess.PIPE,
        text=True,
    )
    assert child.stdout is not None
    for _ in range(3):
        assert child.stdout.readline() == "wrote\n"
    child.kill()
    child.wait()
    child.stdout.close()
    sending = [width for chip in chips(tmp_path / "chips").values() for width in chip.sending_us()]
    assert sum(width is not None for width in sending) == len(OUTPUTS)  # a chip goes on by itself
    return tmp_path


def test_after_kill_9_every_channel_is_full_off(killed: Path) -> None:
    result = run(RUNTIME_DIRECTORY=str(killed))
    assert result.returncode == 0, result.stderr
    assert result.stdout.count("all outputs off") == 2
    for chip in chips(killed / "chips").values():
        assert chip.is_full_off()
        assert chip.sending_us() == [None] * 16


def test_the_chip_file_alone_will_do(killed: Path) -> None:
    assert run("--model", str(killed / "chips")).returncode == 0
    assert all(chip.is_full_off() for chip in chips(killed / "chips").values())


def test_a_fresh_open_after_kill_9_cuts_no_pulse(killed: Path) -> None:
    driver = ModelledPca9685Driver(BOARDS, OUTPUTS, argument=str(killed / "chips"))
    assert driver.chips["fore"].sending_us() != [None] * 16
    driver.open()
    assert all(chip.cut() == [] and chip.is_full_off() for chip in driver.chips.values())
    assert any(chip.seen() for chip in driver.chips.values())
    driver.write(PULSES_US)
    driver.close()


def test_a_chip_file_outlives_its_process_and_other_boards_start_afresh(tmp_path: Path) -> None:
    path = str(tmp_path / "chips")
    make_chip_file(path, [("main", 1, 0x40, 25e6)])
    open_chip_file(path)[0].registers[0x06] = 0x77
    make_chip_file(path, [("main", 1, 0x40, 25e6)])
    assert open_chip_file(path)[0].registers[0x06] == 0x77
    make_chip_file(path, [("main", 1, 0x41, 25e6)])
    assert open_chip_file(path)[0].registers[0x06] == 0x00


def test_files_that_are_none_are_refused_and_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "letter"
    path.write_text("not a chip file, but one that somebody needs")
    with pytest.raises(SettingsError, match="not a chip model file"):
        ModelledPca9685Driver(BOARDS, OUTPUTS, argument=str(path))
    with pytest.raises(SettingsError, match="No such file"):
        ModelledPca9685Driver(BOARDS, OUTPUTS, argument=str(tmp_path / "no" / "directory"))
    result = run("--model", str(path))
    assert result.returncode == 69
    assert "Traceback" not in result.stderr
    assert path.read_text().startswith("not a chip file")


def test_an_empty_note_means_nothing_to_release(tmp_path: Path) -> None:
    note_boards(tmp_path / "boards", [])
    result = run(RUNTIME_DIRECTORY=str(tmp_path))
    assert (result.returncode, result.stderr) == (0, "")
    assert "nothing to release" in result.stdout


def test_one_missing_board_does_not_save_the_others_from_being_tried(killed: Path) -> None:
    note_boards(
        killed / "boards",
        [f"model {killed}/none lost", "i2c 99 0x40", f"model {killed}/chips gone", *_notes(killed)],
    )
    result = run(RUNTIME_DIRECTORY=str(killed))
    assert result.returncode == 69
    assert all(chip.is_full_off() for chip in chips(killed / "chips").values())
    assert "bus 99 address 0x40: there is no such bus" in result.stderr
    assert "board lost" in result.stderr
    assert "board gone" in result.stderr
    assert "Traceback" not in result.stderr


def _notes(directory: Path) -> list[str]:
    return [f"model {directory}/chips {board.name}" for board in BOARDS]


def test_a_line_that_cannot_be_read_is_told_and_the_others_done(killed: Path) -> None:
    note_boards(killed / "boards", ["i2c one 0x40", "", "i2c 1 0x99", "\0\x7f", *_notes(killed)])
    result = run(RUNTIME_DIRECTORY=str(killed))
    assert result.stderr.count("cannot read") == 4
    assert all(chip.is_full_off() for chip in chips(killed / "chips").values())


@pytest.mark.parametrize(
    "arguments",
    [
        ("--bus", "x"),
        ("--bus", "-1"),
        ("--address", "0x99"),
        ("--timeout", "0"),
        ("--timeout", "nan"),
        ("--model", "a", "--bus", "1"),
        ("--nonsense",),
    ],
)
def test_wrong_options_are_usage_errors(arguments: tuple[str, ...]) -> None:
    result = run(*arguments)
    assert result.returncode == 64
    assert "hobnail-release: error" in result.stderr


# ---- the system calls for real adapters, on a stand-in for the device file


class Adapter:
    """Answers the calls of `release` on /dev/i2c-1; knows which addresses are there."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.addresses = {0x40}
        self.plain_i2c = True
        self.failures = 0
        self.selected = 0
        self.heard: list[tuple[int, bytes]] = []
        monkeypatch.setattr(os, "open", lambda _path, _flags: 9999)
        monkeypatch.setattr(os, "write", self.write)
        monkeypatch.setattr(fcntl, "ioctl", self.ioctl)

    def ioctl(self, device: int, request: int, argument: int | bytes) -> int:
        assert device == 9999
        if request == 0x0706:  # I2C_SLAVE_FORCE, linux/i2c-dev.h
            assert isinstance(argument, int)
            self.selected = argument
            return 0
        assert request == 0x0720  # I2C_SMBUS
        assert isinstance(argument, bytes)
        import ctypes

        read_write, command, size, pointer = struct.unpack("BBIP", argument)
        assert (read_write, size) == (0, 2)  # write, byte data
        return self._take(bytes((command, ctypes.c_uint8.from_address(pointer).value)))

    def write(self, device: int, data: bytes) -> int:
        assert device == 9999
        if not self.plain_i2c:
            raise OSError(errno.EOPNOTSUPP, "Operation not supported")
        return self._take(data)

    def _take(self, data: bytes) -> int:
        if self.failures:
            self.failures -= 1
            raise OSError(errno.EAGAIN, "arbitration lost")
        if self.selected not in self.addresses:
            raise OSError(errno.EREMOTEIO, "Remote I/O error")
        self.heard.append((self.selected, data))
        return len(data)


@pytest.fixture
def adapter(monkeypatch: pytest.MonkeyPatch) -> Adapter:
    return Adapter(monkeypatch)


def end(adapter: Adapter, addresses: list[str]) -> list[tuple[str, int]]:
    told: list[tuple[str, int]] = []
    release._end_on_bus(1, addresses, lambda board, number: told.append((board, number)))
    assert all(data == b"\xfd\x10" for _, data in adapter.heard)
    return told


@pytest.mark.parametrize("plain_i2c", [True, False])
def test_all_off_is_two_bytes_to_each_board(adapter: Adapter, plain_i2c: bool) -> None:
    adapter.plain_i2c = plain_i2c
    assert end(adapter, ["0x41", "0x40"]) == [("0x41", 121), ("0x40", 0)]
    assert [address for address, _ in adapter.heard] == [0x40]


def test_a_passing_error_is_tried_again(adapter: Adapter) -> None:
    adapter.failures = 2
    assert end(adapter, ["0x40"]) == [("0x40", 0)]


@pytest.mark.parametrize("addresses", [{0x70}, {0x40}, {0x40, 0x70}])
def test_without_addresses_all_call_and_default_are_tried(adapter: Adapter, addresses: set[int]) -> None:
    adapter.addresses = addresses
    assert end(adapter, []) == [(f"0x{a:02x}", 0) for a in sorted(addresses, reverse=True)]


def test_without_addresses_and_boards_it_fails(adapter: Adapter) -> None:
    adapter.addresses = set()
    assert [number for _, number in end(adapter, [])] == [121, 121]


HANGING = """
import sys, time
from hobnail_drivers import release
release._end_on_bus = lambda *_: time.sleep(3600)
sys.exit(release.main(["--note", sys.argv[1], "--timeout", "1"]))
"""


def test_a_bus_that_hangs_is_given_up_and_the_other_is_done(killed: Path) -> None:
    note = killed / "boards"
    note_boards(note, ["i2c 1 0x40", *_notes(killed)])
    result = subprocess.run(
        [sys.executable, "-c", HANGING, str(note)], capture_output=True, text=True, check=False, timeout=30
    )
    assert result.returncode == 69
    assert "bus 1 address 0x40: no end within 1 s" in result.stderr
    assert all(chip.is_full_off() for chip in chips(killed / "chips").values())


@pytest.mark.parametrize(
    ("environment", "path"),
    [
        ({"RUNTIME_DIRECTORY": "/run/one:/run/two"}, "/run/one/boards"),
        ({"HOBNAIL_SOCKET": "/srv/a/hobnail.sock", "RUNTIME_DIRECTORY": "/run/one"}, "/srv/a/boards"),
        ({"XDG_RUNTIME_DIR": "/run/user/7"}, "/run/user/7/boards"),
        ({}, f"/tmp/hobnail-{os.getuid()}/boards"),
    ],
)
def test_the_note_lies_beside_the_socket(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, environment: dict[str, str], path: str
) -> None:
    monkeypatch.setattr(board_notes, "SYSTEM_DIRECTORY", str(tmp_path))
    assert board_notes.default_path(environment) == path


def test_the_note_of_the_systems_service_comes_before_the_users(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setattr(board_notes, "SYSTEM_DIRECTORY", str(tmp_path))
    note_boards(tmp_path / "boards", [])
    assert board_notes.default_path({"XDG_RUNTIME_DIR": "/run/user/7"}) == str(tmp_path / "boards")
