"""An I2C bus with modelled devices on it, seen through the interface of `smbus2.SMBus`.

Counts what would pass over the wire: bytes with their address bytes, at 9 clocks
each (UM10204, sec. 3.1.5); START and STOP are not counted.  Not modelled: time
on the wire, arbitration, clock stretching.  Errors are the OSErrors of Linux.
"""

from __future__ import annotations

import errno
from collections import deque
from collections.abc import Sequence
from typing import NamedTuple, Protocol

from hobnail_drivers import registers as r

BLOCK_MAX = 32  # bytes of data in one SMBus block
I2C_M_RD = 0x0001  # linux/i2c.h
FUNC_I2C = 0x00000001
FUNC_SMBUS = 0x0C1E0000  # byte, byte data and I2C block, read and write


class Device(Protocol):
    """What a modelled device offers to the bus."""

    def hears(self, address: int) -> bool:
        """Whether it answers to that 7-bit address."""

    def write(self, data: bytes) -> None:
        """One write message."""

    def read(self, length: int) -> bytes:
        """One read message."""

    def stop(self) -> None:
        """The STOP after a transaction that it took part in."""

    def general_call(self, data: bytes) -> bool:
        """A write to address 0; whether it was acknowledged."""


class I2cMessage(Protocol):
    """The part of `smbus2.i2c_msg` that is used."""

    addr: int
    flags: int
    len: int

    @property
    def buf(self) -> object:
        """A ctypes pointer to the bytes."""

    def __bytes__(self) -> bytes: ...


class Message(NamedTuple):
    """One message as it passed: `data` is what was written, or what was read."""

    address: int
    is_read: bool
    data: bytes


class BusModel:
    """`devices` on one bus.  `plain_i2c` False: an adapter that knows SMBus calls only."""

    def __init__(self, devices: Sequence[Device], *, plain_i2c: bool = True, history: int = 1000) -> None:
        self.devices = list(devices)
        self.funcs = FUNC_SMBUS | (FUNC_I2C if plain_i2c else 0)
        self.log: deque[tuple[Message, ...]] = deque(maxlen=history)  # the newest transactions
        self.transactions = 0
        self.bytes = 0
        self.handles = 1  # how many openings have not been closed

    @property
    def clocks(self) -> int:
        """Clock pulses so far, 9 a byte."""
        return 9 * self.bytes

    def transfer(self, *messages: tuple[int, bytes | int]) -> list[bytes]:
        """One transaction: (address, bytes to write or number to read) each; what was read.

        Raises OSError EREMOTEIO when nobody answers; the messages before took effect.
        """
        if self.handles < 1:
            raise OSError(errno.EBADF, "bus is closed")
        touched: list[Device] = []
        done: list[Message] = []
        self.transactions += 1
        try:
            for address, content in messages:
                self.bytes += 1
                hearers = self._hearers(address, content)
                touched += hearers
                if isinstance(content, bytes):
                    if address != r.GENERAL_CALL:
                        for device in hearers:
                            device.write(content)
                    data = content
                else:
                    data = bytes([0xFF] * content)
                    for device in hearers:  # open drain: a 0 of any device wins
                        data = bytes(mine & its for mine, its in zip(data, device.read(content), strict=True))
                self.bytes += len(data)
                done.append(Message(address, not isinstance(content, bytes), data))
        finally:
            self.log.append(tuple(done))
            for device in dict.fromkeys(touched):
                device.stop()
        return [message.data for message in done if message.is_read]

    def _hearers(self, address: int, content: bytes | int) -> list[Device]:
        if address == r.GENERAL_CALL and isinstance(content, bytes):
            hearers = [device for device in self.devices if device.general_call(content)]
        else:
            hearers = [device for device in self.devices if device.hears(address)]
        if not hearers:
            raise OSError(errno.EREMOTEIO, "Remote I/O error")
        return hearers

    # ---- the interface of smbus2.SMBus

    def i2c_rdwr(self, *messages: I2cMessage) -> None:
        """Plain I2C messages as one transaction."""
        if not self.funcs & FUNC_I2C:
            raise OSError(errno.EOPNOTSUPP, "Operation not supported")
        reads = [message for message in messages if message.flags & I2C_M_RD]
        data = self.transfer(
            *((m.addr, m.len if m.flags & I2C_M_RD else bytes(m)) for m in messages),
        )
        for message, got in zip(reads, data, strict=True):
            for index in range(len(got)):
                message.buf[index] = got[index : index + 1]  # type: ignore[index]

    def read_byte(self, address: int) -> int:
        """SMBus receive byte."""
        return self.transfer((address, 1))[0][0]

    def write_byte(self, address: int, value: int) -> None:
        """SMBus send byte."""
        self.transfer((address, bytes((value,))))

    def read_byte_data(self, address: int, register: int) -> int:
        """SMBus read byte."""
        return self.transfer((address, bytes((register,))), (address, 1))[0][0]

    def write_byte_data(self, address: int, register: int, value: int) -> None:
        """SMBus write byte."""
        self.transfer((address, bytes((register, value))))

    def read_i2c_block_data(self, address: int, register: int, length: int) -> list[int]:
        """I2C block read, up to 32 bytes."""
        self._check_block(length)
        return list(self.transfer((address, bytes((register,))), (address, length))[0])

    def write_i2c_block_data(self, address: int, register: int, data: Sequence[int]) -> None:
        """I2C block write, up to 32 bytes."""
        self._check_block(len(data))
        self.transfer((address, bytes((register, *data))))

    def open(self) -> None:
        """Open the bus once more."""
        self.handles += 1

    def close(self) -> None:
        """Close it once; the devices stay as they are."""
        self.handles -= 1

    @staticmethod
    def _check_block(length: int) -> None:
        if not 1 <= length <= BLOCK_MAX:
            raise ValueError(f"SMBus block of {length} bytes; allowed 1 to {BLOCK_MAX}")
