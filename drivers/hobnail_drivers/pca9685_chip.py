"""One PCA9685 as its data sheet has it: registers, oscillator and the pulses on its 16 pins.

Times are seconds of an injected clock, pulses microseconds.  NXP data sheet
Rev. 4, section 7; what the sheet leaves open is decided here and marked
"assumed".  Registers may lie in memory shared with other processes.

Not modelled: voltages and currents, an external clock (EXTCLK is kept as a bit,
the frame stays that of the oscillator), INVRT and OUTNE (the bits are kept, the
record of pulses shows the pins as if not inverted), the time that bits take on
the wire.
"""

from __future__ import annotations

import math
import time
from collections import deque
from collections.abc import Callable
from typing import NamedTuple

from hobnail_drivers import registers as r

# Power-up values (sec. 7.3, table 4); all others are 0.
POWER_UP = (
    bytes((r.SLEEP | r.ALLCALL, r.OUTDRV, 0xE2, 0xE4, 0xE8, 0xE0))
    + bytes((0, 0, 0, r.FULL)) * r.CHANNELS
    + bytes(r.PRE_SCALE - r.LED15_OFF_H - 1)
    + bytes((0x1E, 0))
)

OFF = (0, 0)  # counts of a channel that is full off
ON = (-1, -1)  # and of one that is full on
Counts = tuple[int, int]  # at which the pulse rises and falls


class Pulse(NamedTuple):
    """One pulse seen on a pin; `whole` is False when it was cut short."""

    channel: int
    rise_s: float
    width_us: float
    whole: bool


class _Channel:
    """One pin: the counts acting now, those waiting, and the pulse under way."""

    __slots__ = ("counts", "fall_s", "frame", "rise_s", "waiting", "whole")

    def __init__(self) -> None:
        self.counts: Counts = OFF
        self.waiting: Counts | None = None
        self.frame = 0  # number of the frame in which the next pulse rises
        self.rise_s: float | None = None  # None while the pin is low
        self.fall_s = math.inf
        self.whole = True


class Chip:
    """Registers as seen over I2C, and `pulses`, the newest `history` pulses on the pins.

    `early_writes` counts writes to channel registers within 500 us of waking,
    `equal_counts` channels loaded with ON = OFF: the sheet forbids both.
    """

    def __init__(
        self,
        address: int = r.DEFAULT_ADDRESS,
        *,
        oscillator_hz: float = 25_000_000.0,
        clock: Callable[[], float] = time.monotonic,
        registers: bytearray | memoryview | None = None,
        history: int = 20_000,
    ) -> None:
        """`registers`: 256 bytes to work on; None for a chip that has just got power."""
        self.address = address
        self.oscillator_hz = oscillator_hz
        self.registers = bytearray(POWER_UP) if registers is None else registers
        self.pulses: deque[Pulse] = deque(maxlen=history)
        self.early_writes = 0
        self.equal_counts = 0
        self._clock = clock
        self._channels = [_Channel() for _ in range(r.CHANNELS)]
        self._pointer = 0
        self._changed: set[int] = set()  # channels written since the last STOP
        self._loaded: dict[int, set[int]] = {}  # with OCH = 1: registers written, by channel
        self._held = False  # awake, but waiting for RESTART
        self._enabled = True  # the /OE pin is low
        self._awake = False
        self._start_s = -math.inf  # when the counter was 0 in frame 0
        if not self.registers[r.MODE1] & r.SLEEP:
            self._wake(clock() - r.OSCILLATOR_START_S)

    # ---- what the bus sees

    def hears(self, address: int) -> bool:
        """Whether the chip answers to that 7-bit address: its own, all-call or a sub-address."""
        if address == self.address:
            return True
        mode1 = self.registers[r.MODE1]
        groups = ((r.SUB1, 2), (r.SUB2, 3), (r.SUB3, 4), (r.ALLCALL, r.ALLCALLADR))
        return any(mode1 & bit and self.registers[register] >> 1 == address for bit, register in groups)

    def write(self, data: bytes) -> None:
        """One write message: the register to point at, then what goes there."""
        self._catch_up()
        if data:
            self._pointer = data[0]
        for value in data[1:]:
            self._store(self._pointer, value)
            self._step()

    def read(self, length: int) -> bytes:
        """One read message, from where the pointer stands."""
        self._catch_up()
        data = bytearray()
        for _ in range(length):
            write_only = r.ALL_LED_ON_L <= self._pointer <= r.ALL_LED_OFF_H
            data.append(0 if write_only else self.registers[self._pointer])
            self._step()
        return bytes(data)

    def stop(self) -> None:
        """The STOP that ends a transaction: with OCH = 0 the outputs take up what was written."""
        self._catch_up()
        if self._changed:
            changed = range(r.CHANNELS) if self._held else sorted(self._changed)
            self._held = False
            self._changed.clear()
            self.registers[r.MODE1] &= ~r.RESTART & 0xFF  # sec. 7.3.1.1
            self._load(changed)

    def general_call(self, data: bytes) -> bool:
        """A write to address 0: the software reset (sec. 7.6) or nothing; whether it was acknowledged."""
        if data != bytes((r.SOFTWARE_RESET,)):
            return False
        self.reset()
        return True

    def reset(self) -> None:
        """Power-on reset, or software reset over the general call: all as at power-up."""
        self._catch_up()
        self._halt()
        self.registers[:] = POWER_UP
        self._pointer = 0
        self._changed.clear()
        self._loaded.clear()
        self._held = False

    # ---- what pins and people see

    def enable(self, enabled: bool) -> None:
        """The /OE pin: True for low (outputs work), False for high (all pins low)."""
        self._catch_up()
        if enabled == self._enabled:
            return
        now_s = self._clock()
        for channel, pin in enumerate(self._channels):
            if pin.rise_s is not None:
                if enabled:
                    pin.rise_s, pin.whole = now_s, False
                else:
                    self._record(channel, pin, now_s, whole=False)
        self._enabled = enabled

    @property
    def frame_s(self) -> float:
        """Length of a frame, s."""
        return 1.0 / r.true_frame_hz(self.oscillator_hz, self.registers[r.PRE_SCALE])

    def sending_us(self) -> list[float | None]:
        """Pulse width asked of each channel by the registers now, us; None for no pulses."""
        self._catch_up()
        if not self._awake or self._held or not self._enabled:
            return [None] * r.CHANNELS
        count_us = self.frame_s / r.COUNTS * 1e6
        widths: list[float | None] = []
        for channel in range(r.CHANNELS):
            rise, fall = counts = self._counts(channel)
            if counts == ON:
                widths.append(math.inf)
            else:
                widths.append(None if rise == fall else (fall - rise) % r.COUNTS * count_us)
        return widths

    def is_full_off(self) -> bool:
        """Whether every channel's full-off bit is set."""
        return all(self.registers[r.led_on_l(n) + 3] & r.FULL for n in range(r.CHANNELS))

    def seen(self) -> list[Pulse]:
        """Every recorded pulse that has ended by now, in the order of their ends."""
        self._catch_up()
        return list(self.pulses)

    def cut(self) -> list[Pulse]:
        """Recorded pulses that were cut short."""
        return [pulse for pulse in self.seen() if not pulse.whole]

    def doubled(self) -> list[Pulse]:
        """Recorded pulses that rose less than a frame (of now) after the one before on their pin."""
        last: dict[int, float] = {}
        found = []
        for pulse in self.seen():
            if pulse.rise_s - last.get(pulse.channel, -math.inf) < self.frame_s * (1.0 - 1e-9):
                found.append(pulse)
            last[pulse.channel] = pulse.rise_s
        return found

    # ---- registers

    def _step(self) -> None:
        if self.registers[r.MODE1] & r.AUTO_INCREMENT:
            # Runs from the last channel's register back to 0 (table 4); the
            # registers from 0xFA on are reached by pointing at them.
            self._pointer = 0 if self._pointer == r.LED15_OFF_H else (self._pointer + 1) % 256

    def _store(self, register: int, value: int) -> None:
        if register == r.MODE1:
            self._store_mode1(value)
        elif register == r.MODE2:
            self.registers[register] = value & 0x1F
        elif register <= r.ALLCALLADR:
            self.registers[register] = value & 0xFE  # bit 0 is read-only
        elif register <= r.LED15_OFF_H:
            self._store_channel(register, value)
        elif r.ALL_LED_ON_L <= register <= r.ALL_LED_OFF_H:
            for channel in range(r.CHANNELS):
                self._store_channel(r.led_on_l(channel) + register - r.ALL_LED_ON_L, value)
        elif register == r.PRE_SCALE and self.registers[r.MODE1] & r.SLEEP:
            self.registers[register] = max(value, r.MIN_PRE_SCALE)  # sec. 7.3.5
        # Other registers are reserved: they take nothing and read 0.

    def _store_mode1(self, value: int) -> None:
        old = self.registers[r.MODE1]
        restart = old & r.RESTART
        # EXTCLK can be set only while asleep and SLEEP stays set, and then sticks
        # until power is cycled or the software reset (sec. 7.3.1).
        asleep_throughout = old & value & r.SLEEP
        extclk = (old | (value if asleep_throughout else 0)) & r.EXTCLK
        self.registers[r.MODE1] = value & ~(r.RESTART | r.EXTCLK) & 0xFF | extclk | restart
        if value & r.SLEEP and not old & r.SLEEP:
            if any(self._counts(channel) != OFF for channel in range(r.CHANNELS)):
                self.registers[r.MODE1] |= r.RESTART
            self._halt()
        elif old & r.SLEEP and not value & r.SLEEP:
            self._held = bool(restart)
            self._wake(self._clock())
        elif value & restart and not old & r.SLEEP:
            self.registers[r.MODE1] &= ~r.RESTART & 0xFF
            self._held = False
            self._load(range(r.CHANNELS))

    def _store_channel(self, register: int, value: int) -> None:
        if self._awake and self._clock() < self._start_s:
            self.early_writes += 1
        channel, byte = divmod(register - r.LED0_ON_L, r.BYTES_A_CHANNEL)
        self.registers[register] = value & 0x1F if byte % 2 else value
        if not self.registers[r.MODE2] & r.OCH:
            self._changed.add(channel)
            return
        # OCH = 1: a channel changes on the acknowledge of the last of its four registers.
        loaded = self._loaded.setdefault(channel, set())
        loaded.add(byte)
        if len(loaded) == r.BYTES_A_CHANNEL:
            del self._loaded[channel]
            self._changed.add(channel)
            self.stop()

    def _counts(self, channel: int) -> Counts:
        on_l, on_h, off_l, off_h = self.registers[r.led_on_l(channel) : r.led_on_l(channel) + 4]
        if off_h & r.FULL:  # full-off wins over full-on (table 7)
            return OFF
        if on_h & r.FULL:
            return ON
        rise, fall = on_h << 8 | on_l, off_h << 8 | off_l
        return OFF if rise == fall else (rise, fall)  # assumed: ON = OFF, which is forbidden, gives no pulse

    # ---- the pins

    def _wake(self, now_s: float) -> None:
        self._awake = True
        self._start_s = now_s + r.OSCILLATOR_START_S
        for pin in self._channels:
            pin.counts, pin.waiting, pin.frame = OFF, None, 0
        if not self._held:
            self._load(range(r.CHANNELS))

    def _halt(self) -> None:
        """The oscillator stops.  Assumed: at once, so that a pulse under way is cut."""
        now_s = self._clock()
        for channel, pin in enumerate(self._channels):
            if pin.rise_s is not None:
                self._record(channel, pin, now_s, whole=False)
            pin.rise_s, pin.fall_s, pin.counts, pin.waiting = None, math.inf, OFF, None
        self._awake = False

    def _load(self, channels: range | list[int]) -> None:
        """Hand the registers to the pins: at once where no pulses run, else after the low part."""
        if not self._awake:
            return
        now_s = max(self._clock(), self._start_s)
        for channel in channels:
            pin = self._channels[channel]
            counts = self._counts(channel)
            if counts == OFF and not self.registers[r.led_on_l(channel) + 3] & r.FULL:
                self.equal_counts += 1
            if pin.counts not in (OFF, ON):
                pin.waiting = counts
            elif counts != pin.counts:
                if pin.rise_s is not None:
                    self._record(channel, pin, now_s, whole=pin.whole)
                    pin.rise_s = None
                pin.counts = counts
                if counts == ON:
                    pin.rise_s = now_s
                pin.frame = math.ceil((now_s - self._start_s) / self.frame_s - counts[0] / r.COUNTS)

    def _record(self, channel: int, pin: _Channel, fall_s: float, *, whole: bool) -> None:
        assert pin.rise_s is not None
        if self._enabled:
            self.pulses.append(Pulse(channel, pin.rise_s, (fall_s - pin.rise_s) * 1e6, whole))

    def _catch_up(self) -> None:
        """Play the pins forward to now."""
        if not self._awake:
            return
        if self.registers[r.MODE1] & r.SLEEP:  # another process reset the shared registers
            self._halt()
            return
        now_s = self._clock()
        frame_s = self.frame_s
        for channel, pin in enumerate(self._channels):
            if pin.counts != OFF and pin.counts != ON:
                self._play(channel, pin, now_s, frame_s)

    def _play(self, channel: int, pin: _Channel, now_s: float, frame_s: float) -> None:
        while True:
            if pin.rise_s is not None:
                if pin.fall_s > now_s:
                    return
                self._record(channel, pin, pin.fall_s, whole=pin.whole)
                pin.rise_s, pin.whole = None, True
                pin.frame += 1
            rise, fall = pin.counts
            rise_s = self._start_s + (pin.frame + rise / r.COUNTS) * frame_s
            if rise_s > now_s:
                return
            if pin.waiting is not None:
                # The low part ends here: new counts act from now on (sec. 7.3.4),
                # so that neither the old pulse nor the new one is cut.
                pin.counts, pin.waiting = pin.waiting, None
                if pin.counts == OFF:
                    return
                if pin.counts == ON:
                    pin.rise_s = rise_s
                    return
                pin.frame += pin.counts[0] < rise
                continue
            pin.rise_s = rise_s
            pin.fall_s = rise_s + (fall - rise) % r.COUNTS / r.COUNTS * frame_s
