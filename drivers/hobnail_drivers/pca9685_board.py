"""One PCA9685 board on its bus: pulses in us to counts of a 12-bit frame, set-up, read-back.

Registers and their meaning by the NXP data sheet, Rev. 4.  Set-up goes through
the `adafruit_pca9685` library; frames are written directly, in bursts by
auto-increment, so that no pulse is cut and the fewest bytes pass.
Methods raise OSError as the bus does; `Pca9685Driver` says what it means.
"""

from __future__ import annotations

import ctypes
import struct
from collections.abc import Callable, Iterable, Sequence
from functools import partial
from typing import Any

from hobnail_drivers import registers as r
from hobnail_drivers.contract import BoardSettings, Output, Pulses
from hobnail_drivers.errors import BusError, SettingsError, SetupError
from hobnail_drivers.i2c import BLOCK_MAX, RegisterBus, SmBus, bus_error
from hobnail_drivers.libraries import load, load_pwm_chip

MODE1_RUNNING = r.AUTO_INCREMENT  # awake; answers to its own address only
MODE2_RUNNING = r.OUTDRV  # totem pole; outputs change at STOP; low while /OE is high
LOW_OSCILLATOR_HZ = 20e6  # slower than any board seen, for waits

Slot = tuple[int, int, int]  # channel, index into the pulses, count at which the pulse rises


class _Run:
    """Consecutive channels of one board, and the message that carries their counts.

    A message is one burst by auto-increment.  It starts at OFF_L of its first
    channel, whose ON count was loaded by the set-up and never changes; no
    shorter one gives every channel its pulse.  With OCH = 0 the chip takes all
    of it up at the STOP, so that no half of a count ever acts.
    """

    def __init__(self, address: int, slots: Sequence[Slot]) -> None:
        self.first = slots[0][0]
        self.rise = slots[0][2]
        self.register = r.led_on_l(self.first) + 2
        # A pulse of so many counts falls so many after it rises; half a count more rounds it.
        self._slots = [(index, rise + 0.5) for _, index, rise in slots]
        self._counts = [0] * (2 * len(slots) - 1)  # fall, rise, fall, ..., fall
        self._counts[1::2] = [rise for _, _, rise in slots[1:]]
        self._pack_into = struct.Struct(f"<{len(self._counts)}H").pack_into
        size = 1 + 2 * len(self._counts)
        self.message = load("smbus2", "smbus2").i2c_msg.write(
            address, bytes((self.register,)) + bytes(size - 1)
        )
        # The message's own bytes, so that a frame is packed where it is sent from.
        self.buffer = (ctypes.c_uint8 * size).from_address(ctypes.addressof(self.message.buf.contents))

    def fill(self, pulses_us: Pulses, counts_a_us: float) -> None:
        """Put the pulses into the message; the only place where they are rounded."""
        self._counts[0::2] = [
            r.FULL_16
            if (pulse_us := pulses_us[index]) is None
            else int(pulse_us * counts_a_us + ahead) & 0xFFF
            for index, ahead in self._slots
        ]
        self._pack_into(self.buffer, 1, *self._counts)


class Board:
    """One board: its settings as register values, and its messages once connected.

    Raises SettingsError when its chip cannot have the frame rate, or an output
    allows a pulse that does not fit into the frame.
    """

    def __init__(self, settings: BoardSettings, outputs: Sequence[Output]) -> None:
        self.settings = settings
        self.pre_scale = _pre_scale(settings)
        self.frame_hz = r.true_frame_hz(settings.oscillator_hz, self.pre_scale)
        self.counts_a_us = self.frame_hz * r.COUNTS * 1e-6
        mine = sorted((out.channel, index) for index, out in enumerate(outputs) if out.board == settings.name)
        for channel, index in mine:
            self._check(channel, outputs[index])
        # Pulses rise one after the other over the frame, and so do the currents
        # that servos draw at the start of each.
        self._slots: list[Slot] = [
            (channel, index, turn * r.COUNTS // len(mine)) for turn, (channel, index) in enumerate(mine)
        ]
        self._runs: list[_Run] = []
        self._bus: RegisterBus | None = None
        self._send: Callable[[], None] = _send_nothing

    def connect(self, bus: SmBus) -> None:
        """Use that bus from now on.  Raises SetupError when its adapter cannot carry a frame."""
        self._bus = RegisterBus(bus)
        address = self.settings.address
        longest = r.CHANNELS if self._bus.has_plain_i2c else (BLOCK_MAX + 2) // r.BYTES_A_CHANNEL
        self._runs = [_Run(address, slots) for slots in _consecutive(self._slots, longest)]
        if not self._runs:
            self._send = _send_nothing
        elif self._bus.has_plain_i2c:
            self._send = partial(bus.i2c_rdwr, *(run.message for run in self._runs))
        else:
            self._send = partial(_send_blocks, bus, address, self._runs)

    def write(self, pulses_us: Pulses) -> None:
        """Send one frame: this board's share of the pulses, None for no signal."""
        for run in self._runs:
            run.fill(pulses_us, self.counts_a_us)
        self._send()

    def set_up(self, sleep: Callable[[float], None]) -> None:
        """Every output full off, frame rate set, oscillator running; verified.  Raises SetupError.

        A program that died leaves its board pulsing, and the set-up has to put
        it to sleep: every pulse under way ends before that.
        """
        bus, address = self._connected(), self.settings.address
        (mode1,) = bus.read(address, r.MODE1, 1)
        self.end_pulses()
        if not mode1 & r.SLEEP:
            (pre_scale,) = bus.read(address, r.PRE_SCALE, 1)
            sleep(1.0 / r.true_frame_hz(LOW_OSCILLATOR_HZ, pre_scale))
        # The library wakes the chip, sets the frame rate asleep, and wakes it
        # again for 5 ms: ten times what the oscillator needs.
        chip: Any = load_pwm_chip().PCA9685(
            bus, address=address, reference_clock_speed=self.settings.oscillator_hz
        )
        chip.frequency = self.settings.frame_hz
        chip.mode2_reg = MODE2_RUNNING
        chip.mode1_reg = MODE1_RUNNING
        for run in self._runs:
            bus.write(address, struct.pack("<BH", r.led_on_l(run.first), run.rise))
        if differences := self.differences():
            raise SetupError(
                f"board {self.settings.name}: {differences}: is it a PCA9685?  Switch its supply off and on, "
                "and try again"
            )
        channels = bus.read(address, r.LED0_ON_L, r.BYTES_A_CHANNEL * r.CHANNELS)
        if not all(off_h & r.FULL for off_h in channels[3 :: r.BYTES_A_CHANNEL]):
            raise SetupError(
                f"board {self.settings.name}: an output is on after setting up: does another program write "
                "to it?"
            )

    def end_pulses(self) -> None:
        """Full off on every channel of the board; nothing before `connect`."""
        if self._bus is not None:
            self._bus.write(self.settings.address, r.ALL_OFF)

    def differences(self) -> str:
        """What of the board's settings is not as set up, in words; empty when all is."""
        bus, address = self._connected(), self.settings.address
        wanted = [
            ("MODE1", r.MODE1, bytes((MODE1_RUNNING,))),
            ("MODE2", r.MODE2, bytes((MODE2_RUNNING,))),
            ("PRE_SCALE", r.PRE_SCALE, bytes((self.pre_scale,))),
            *(
                (f"LED{run.first}_ON", r.led_on_l(run.first), struct.pack("<H", run.rise))
                for run in self._runs
            ),
        ]
        return ", ".join(
            f"{name} is 0x{got[::-1].hex()}, was set to 0x{value[::-1].hex()}"
            for name, register, value in wanted
            if (got := bus.read(address, register, len(value))) != value
        )

    def error(self, error: OSError, doing: str) -> BusError:
        """The system's error with this board's name and advice."""
        return bus_error(error, self.settings.name, self.settings.bus, self.settings.address, doing)

    def _connected(self) -> RegisterBus:
        assert self._bus is not None, "connect() comes first"
        return self._bus

    def _check(self, channel: int, output: Output) -> None:
        low, high = output.min_us * self.counts_a_us, output.max_us * self.counts_a_us
        if low < 1.0 or high > r.COUNTS - 1:
            raise SettingsError(
                f"board {self.settings.name} channel {channel}: limits {output.min_us} to {output.max_us} "
                f"us; at {self.frame_hz:.2f} Hz pulses of {1.0 / self.counts_a_us:.1f} to "
                f"{(r.COUNTS - 1) / self.counts_a_us:.0f} us can be sent"
            )


def _pre_scale(settings: BoardSettings) -> int:
    pre_scale = r.pre_scale(settings.oscillator_hz, settings.frame_hz)
    slowest = r.true_frame_hz(settings.oscillator_hz, r.MAX_PRE_SCALE)
    fastest = r.true_frame_hz(settings.oscillator_hz, r.MIN_PRE_SCALE)
    if not 0.999 * slowest <= settings.frame_hz <= 1.001 * fastest:
        raise SettingsError(
            f"board {settings.name}: frame rate is {settings.frame_hz} Hz; its chip can do "
            f"{slowest:.1f} to {fastest:.0f} Hz"
        )
    return pre_scale


def _consecutive(slots: Iterable[Slot], longest: int) -> list[list[Slot]]:
    """Part slots at gaps between channels, where a new message costs less than the gap, and at `longest`."""
    runs: list[list[Slot]] = []
    for slot in slots:
        if runs and runs[-1][-1][0] == slot[0] - 1 and len(runs[-1]) < longest:
            runs[-1].append(slot)
        else:
            runs.append([slot])
    return runs


def _send_nothing() -> None:
    """A board without outputs."""


def _send_blocks(bus: SmBus, address: int, runs: Sequence[_Run]) -> None:
    for run in runs:
        bus.write_i2c_block_data(address, run.register, run.buffer[1:])
