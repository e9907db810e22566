"""Voltage of the servo supply: an INA219 on the I2C bus, its register model, and a simulated supply; V.

Registers by the TI data sheet SBOS448, sections 8.6 (register details) and 8.5.1
(programming), recalled from memory.  Current and power are not read: the
calibration register stays as it is.
"""

from __future__ import annotations

import time
from abc import ABC, abstractmethod
from collections.abc import Callable

from hobnail_drivers.errors import BusError, DriverError, NotOpenError, SetupError
from hobnail_drivers.i2c import OpenBus, RegisterBus, bus_error, open_bus

CONFIGURATION = 0x00
BUS_VOLTAGE = 0x02
CALIBRATION = 0x05

# Configuration at power-up (memory): 32 V range, shunt gain /8, 12 bits in
# 0.53 ms each, shunt and bus continuously.
SETTINGS = 0x399F
RESET = 0x8000
CONVERSION_S = 0.0012  # shunt and bus, with some room
TRIES = 3

# Bus voltage register (memory): bits 15..3 in steps of 4 mV; bit 1 CNVR, a
# measurement is there; bit 0 OVF, current or power overflowed, of no interest here.
LSB_V = 0.004
CNVR = 0x02


class SupplyMonitor(ABC):
    """What measures the servo supply."""

    @abstractmethod
    def volts(self) -> float:
        """The voltage now, V.  Raises BusError."""

    @abstractmethod
    def close(self) -> None:
        """Let go of the device; may be called twice."""


class SimulatedSupply(SupplyMonitor):
    """A supply that has the voltage it is told."""

    def __init__(self, volts: float) -> None:
        self.now_v = volts

    def volts(self) -> float:
        return self.now_v

    def close(self) -> None:
        pass


class Ina219(SupplyMonitor):
    """An INA219 whose bus side is wired to the servo supply (up to 26 V).

    It runs on its power-up settings, so that a brown-out of its own changes
    nothing.  Single readings, unfiltered: servos pull the supply down for
    milliseconds at a time.
    """

    def __init__(
        self,
        bus: int,
        address: int = 0x41,
        *,
        open_bus: OpenBus = open_bus,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        """Opens the bus and sets the device up.  Raises BusError, SetupError, MissingLibraryError."""
        self._number = bus
        self._address = address
        self._sleep = sleep
        try:
            self._opened = open_bus(bus)
        except OSError as error:
            raise self._error(error) from error
        self._bus: RegisterBus | None = None
        try:
            self._bus = RegisterBus(self._opened)
            self._bus.write(address, bytes((CONFIGURATION, *SETTINGS.to_bytes(2, "big"))))
            if (kept := self._read(CONFIGURATION)) != SETTINGS:
                raise SetupError(
                    f"supply monitor at address 0x{address:02x}: configuration is 0x{kept:04x}, was set to "
                    f"0x{SETTINGS:04x}: is it an INA219?"
                )
        except DriverError:
            self._opened.close()
            raise
        except OSError as error:
            self._opened.close()
            raise self._error(error) from error

    def volts(self) -> float:
        """The voltage now, V.  Raises BusError; SetupError when the device measures nothing."""
        try:
            for _ in range(TRIES):
                value = self._read(BUS_VOLTAGE)
                if value & CNVR:
                    return (value >> 3) * LSB_V
                self._sleep(CONVERSION_S)
        except OSError as error:
            raise self._error(error) from error
        raise SetupError(
            f"supply monitor at address 0x{self._address:02x} has no measurement after "
            f"{TRIES * CONVERSION_S * 1e3:.0f} ms: is it an INA219, and does it have power?"
        )

    def close(self) -> None:
        if self._bus is not None:
            self._bus = None
            self._opened.close()

    def _read(self, register: int) -> int:
        if self._bus is None:
            raise NotOpenError("the supply monitor is closed")
        return int.from_bytes(self._bus.read(self._address, register, 2), "big")

    def _error(self, error: OSError) -> BusError:
        return bus_error(error, "INA219", self._number, self._address, "reading", "supply monitor")


class Ina219Model:
    """The registers of an INA219, as a device for `BusModel`; `volts` is what it is wired to.

    Converts at once while `is_ready`; current and power read 0.
    """

    def __init__(self, address: int = 0x41, *, volts: float = 0.0) -> None:
        self.address = address
        self.volts = volts
        self.is_ready = True
        self.reset()

    def reset(self) -> None:
        """As after power-up."""
        self.configuration = SETTINGS
        self.calibration = 0
        self._pointer = CONFIGURATION

    def hears(self, address: int) -> bool:
        """Its own address only."""
        return address == self.address

    def write(self, data: bytes) -> None:
        """The register to point at, then its two bytes, high byte first."""
        if data:
            self._pointer = data[0]
        if len(data) >= 3:
            value = data[1] << 8 | data[2]
            if self._pointer == CONFIGURATION and value & RESET:
                self.reset()
            elif self._pointer == CONFIGURATION:
                self.configuration = value
            elif self._pointer == CALIBRATION:
                self.calibration = value & 0xFFFE

    def read(self, length: int) -> bytes:
        """The two bytes of the register pointed at; past them the released line, 0xFF."""
        values = {
            CONFIGURATION: self.configuration,
            BUS_VOLTAGE: min(int(self.volts / LSB_V + 0.5), 0x1FFF) << 3 | CNVR * self.is_ready,
            CALIBRATION: self.calibration,
        }
        value = values.get(self._pointer, 0).to_bytes(2, "big")
        return (value + b"\xff" * length)[:length]

    def stop(self) -> None:
        """Nothing waits for it."""

    def general_call(self, data: bytes) -> bool:
        """Not heard."""
        del data
        return False
