"""An I2C bus as `smbus2` gives it: opened by number, errors with advice, and the shape other libraries want.

Knows addresses, registers and bytes; nothing of PWM.
"""

from __future__ import annotations

import errno
from collections.abc import Callable, Sequence
from typing import Any, Protocol, cast

from hobnail_drivers.errors import BusError, SetupError
from hobnail_drivers.libraries import load

BLOCK_MAX = 32  # bytes of data in one SMBus block (SMBus 2.0, sec. 5.5.7)

# Adapter functions, from linux/i2c.h.
FUNC_I2C = 0x00000001
FUNC_SMBUS_BLOCKS = 0x0C000000  # I2C block read and write

ADVICE = {
    errno.EREMOTEIO: "no answer: check that the board has power, its address pins and the wires",
    errno.ENXIO: "no answer: check that the board has power, its address pins and the wires",
    errno.ETIMEDOUT: "the bus is wedged (a device holds a line low): switch the boards' supply off and on, "
    "then look for a short and for missing pull-ups",
    errno.EIO: "the transfer broke off: check wires, pull-ups and noise from the servo supply, "
    "or slow the bus",
    errno.EAGAIN: "lost the bus to another controller: there must be only one on these wires",
    errno.ENOENT: "there is no such bus: switch I2C on in the computer's boot configuration, "
    "or correct the bus number",
    errno.ENODEV: "the adapter has gone: check its driver and cable",
    errno.EACCES: "no permission: add this user to the group i2c, then log in again",
    errno.EBUSY: "another driver holds the address: unload the kernel module that claims it",
    errno.EOPNOTSUPP: "the adapter cannot do this transfer: use another bus",
}


class SmBus(Protocol):
    """The part of `smbus2.SMBus` that is used."""

    @property
    def funcs(self) -> int:
        """The adapter's functions, as I2C_FUNCS gives them."""

    def i2c_rdwr(self, *messages: Any) -> None:
        """Plain I2C messages as one transaction."""

    def read_byte(self, address: int, /) -> int:
        """SMBus receive byte."""

    def write_byte_data(self, address: int, register: int, value: int, /) -> None:
        """SMBus write byte."""

    def read_i2c_block_data(self, address: int, register: int, length: int, /) -> list[int]:
        """I2C block read, up to 32 bytes."""

    def write_i2c_block_data(self, address: int, register: int, data: Sequence[int], /) -> None:
        """I2C block write, up to 32 bytes."""

    def close(self) -> None:
        """Let go of the bus."""


OpenBus = Callable[[int], SmBus]


def open_bus(number: int) -> SmBus:
    """Open /dev/i2c-NUMBER.  Raises OSError, MissingLibraryError."""
    return cast(SmBus, load("smbus2", "smbus2").SMBus(number))


def bus_error(
    error: OSError, board: str, bus: int, address: int, doing: str, kind: str = "board"
) -> BusError:
    """The error to raise `from` one of the system: what was being done, and what to do next."""
    number = error.errno or errno.EIO
    advice = ADVICE.get(number, error.strerror or str(error))
    return BusError(number, f"{doing} at address 0x{address:02x} on bus {bus}: {advice}", board, kind)


class RegisterBus:
    """A bus by registers, whichever of plain I2C and SMBus blocks its adapter has.

    Also the bus that `adafruit_bus_device` expects: `try_lock`, `unlock`, `scan`,
    `writeto`, `readfrom_into`, `writeto_then_readfrom`.  Methods raise OSError.
    """

    def __init__(self, bus: SmBus) -> None:
        """Raises SetupError when the adapter has neither plain I2C nor SMBus I2C blocks."""
        self.bus = bus
        self.has_plain_i2c = bool(bus.funcs & FUNC_I2C)
        if not self.has_plain_i2c and bus.funcs & FUNC_SMBUS_BLOCKS != FUNC_SMBUS_BLOCKS:
            raise SetupError(
                f"the I2C adapter knows neither plain I2C nor SMBus blocks (functions 0x{bus.funcs:08x}): "
                "use another bus"
            )
        self._message = load("smbus2", "smbus2").i2c_msg

    def read(self, address: int, register: int, length: int) -> bytes:
        """Read `length` bytes from `register` on; past the first only if the device increments."""
        if self.has_plain_i2c:
            answer = self._message.read(address, length)
            self.bus.i2c_rdwr(self._message.write(address, (register,)), answer)
            return bytes(answer)
        data: list[int] = []
        while len(data) < length:
            part = min(BLOCK_MAX, length - len(data))
            data += self.bus.read_i2c_block_data(address, register + len(data), part)
        return bytes(data)

    def write(self, address: int, data: bytes) -> None:
        """Write a register's address and what goes there, at most 32 bytes."""
        if self.has_plain_i2c:
            self.bus.i2c_rdwr(self._message.write(address, data))
        elif len(data) == 2:
            self.bus.write_byte_data(address, data[0], data[1])
        else:
            self.bus.write_i2c_block_data(address, data[0], list(data[1:]))

    def try_lock(self) -> bool:
        """Always: the kernel keeps transactions apart."""
        return True

    def unlock(self) -> None:
        """Nothing to do."""

    def scan(self) -> list[int]:
        """The addresses at which a byte can be read."""
        found = []
        for address in range(0x08, 0x78):
            try:
                self.bus.read_byte(address)
            except OSError:
                continue
            found.append(address)
        return found

    def writeto(
        self, address: int, buffer: bytes | bytearray, *, start: int = 0, end: int | None = None
    ) -> None:
        """Write a part of `buffer`; an empty one is refused, for many adapters cannot send it."""
        data = bytes(buffer[start:end])
        if not data:
            raise OSError(errno.EOPNOTSUPP, "empty message")
        self.write(address, data)

    def readfrom_into(
        self, address: int, buffer: bytearray, *, start: int = 0, end: int | None = None
    ) -> None:
        """Fill a part of `buffer` from where the device's pointer stands."""
        for index in range(*slice(start, end).indices(len(buffer))):
            buffer[index] = self.bus.read_byte(address)

    def writeto_then_readfrom(
        self,
        address: int,
        out_buffer: bytes | bytearray,
        in_buffer: bytearray | memoryview,
        *,
        out_start: int = 0,
        out_end: int | None = None,
        in_start: int = 0,
        in_end: int | None = None,
    ) -> None:
        """Write one register's address, then read from it on into a part of `in_buffer`."""
        (register,) = out_buffer[out_start:out_end]
        span = slice(in_start, in_end)
        length = len(range(*span.indices(len(in_buffer))))
        in_buffer[span] = self.read(address, register, length)
