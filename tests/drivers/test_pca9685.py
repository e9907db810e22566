"""The PCA9685 driver, byte by byte on modelled chips; sections are those of the NXP data sheet, Rev. 4."""

from __future__ import annotations

import errno
import math
import struct
import subprocess
import sys
from collections.abc import Callable, Sequence
from threading import Thread
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hobnail_drivers import registers as r
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.conformance import ManualClock
from hobnail_drivers.contract import BoardSettings, Output
from hobnail_drivers.errors import BusError, MissingLibraryError, SettingsError, SetupError
from hobnail_drivers.faults import FaultInjector
from hobnail_drivers.gpio import OutputLine
from hobnail_drivers.i2c import RegisterBus, SmBus
from hobnail_drivers.libraries import load_pwm_chip
from hobnail_drivers.pca9685 import Pca9685Driver

FRAME_S = 1.0 / 50.0288
WAIT_S = 10.0  # a bound for a broken test, not a time that anything takes


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> ManualClock:
    """Passes by `time.sleep` too, which the chip library calls."""
    clock = ManualClock()
    monkeypatch.setattr("time.sleep", clock.sleep)
    return clock


def board(name: str = "main", address: int = 0x40, **extra: Any) -> BoardSettings:
    return BoardSettings(**{"name": name, "bus": 1, "address": address, "frame_hz": 50.0, **extra})


def outputs(channels: Sequence[int] = range(12), name: str = "main") -> list[Output]:
    return [Output(board=name, channel=channel, min_us=500.0, max_us=2500.0) for channel in channels]


def opened(
    clock: ManualClock, channels: Sequence[int] = range(12), **extra: Any
) -> tuple[ModelledPca9685Driver, Any, Any]:
    """An open driver of one board, its bus and its chip; the bus's log holds nothing yet."""
    driver = ModelledPca9685Driver([board()], outputs(channels), clock=clock, sleep=clock.sleep, **extra)
    driver.open()
    driver.buses[1].log.clear()
    return driver, driver.buses[1], driver.chips["main"]


# ---- set-up on the wire


@pytest.mark.parametrize("plain_i2c", [True, False])
def test_outputs_are_full_off_before_the_oscillator_wakes(clock: ManualClock, plain_i2c: bool) -> None:
    driver = ModelledPca9685Driver([board()], outputs(), clock=clock, sleep=clock.sleep, plain_i2c=plain_i2c)
    driver.open()
    writes = [m.data for transaction in driver.buses[1].log for m in transaction if not m.is_read]
    all_off = writes.index(bytes((0xFD, 0x10)))
    wake = next(i for i, data in enumerate(writes) if len(data) == 2 and data[0] == 0 and not data[1] & 0x10)
    assert all_off < wake
    chip = driver.chips["main"]
    assert chip.seen() == []
    assert chip.registers[r.MODE1] == 0x20  # auto-increment; no all-call, no sub-addresses, awake
    assert chip.registers[r.MODE2] == 0x04
    assert chip.registers[r.PRE_SCALE] == 121  # 50 Hz at 25 MHz, sec. 7.3.5
    assert not chip.hears(0x70)


@pytest.mark.parametrize("frames", [2.0, 2.3, 2.6, 2.9])
def test_a_board_that_a_dead_program_left_pulsing_ends_each_pulse_whole(
    clock: ManualClock, frames: float
) -> None:
    driver, _, chip = opened(clock)
    driver.write([2500.0] * 12)
    clock.sleep(frames * FRAME_S)
    fresh = Pca9685Driver(
        [board()], outputs(), open_bus=lambda _: driver.buses[1], sleep=clock.sleep
    )  # as after a crash: nothing was released
    fresh.open()
    clock.sleep(1.0)
    assert chip.seen() != []
    assert chip.cut() == []
    assert chip.is_full_off()
    assert chip.early_writes == 0


def test_true_frame_rate_is_used_for_counts(clock: ManualClock) -> None:
    """At p = 121: 500/1000/1500/2000/2500 us -> 102/205/307/410/512 counts."""
    driver, _, chip = opened(clock, range(5))
    driver.write([500.0, 1000.0, 1500.0, 2000.0, 2500.0])
    counts = struct.unpack_from("<10H", chip.registers, r.led_on_l(0))
    assert [(fall - rise) % 4096 for rise, fall in zip(counts[0::2], counts[1::2], strict=True)] == [
        102, 205, 307, 410, 512,
    ]  # fmt: skip
    assert driver.health().frame_hz["main"] == pytest.approx(50.0288, abs=1e-4)


def test_the_chip_library_agrees(clock: ManualClock) -> None:
    """An outside judge: adafruit_pca9685 reads back what the driver wrote, and the reverse."""
    driver, bus, chip = opened(clock, [0, 5])
    driver.write([1500.0, None])
    judge = load_pwm_chip().PCA9685(RegisterBus(bus), address=0x40)  # its reset only clears MODE1
    judge.mode1_reg = 0x20
    assert judge.frequency == pytest.approx(50.0288, abs=1e-4)
    assert judge.channels[0].duty_cycle >> 4 == 307
    assert judge.channels[5].duty_cycle == 0
    judge.channels[7].duty_cycle = 0x8000
    assert chip.sending_us()[7] == pytest.approx(0.5e6 / 50.0288, rel=1e-4)
    judge.frequency = 100
    assert chip.registers[r.PRE_SCALE] == r.pre_scale(25e6, 100.0) == 60


def test_a_scan_finds_the_boards_and_all_call_only_before_the_set_up(clock: ManualClock) -> None:
    driver = two_boards(clock)
    driver.buses[1].open()
    bus = RegisterBus(driver.buses[1])
    assert bus.scan() == [0x40, 0x41, 0x70]
    driver.open()
    assert bus.scan() == [0x40, 0x41]


@settings(max_examples=200, deadline=None)
@given(
    oscillator_hz=st.floats(23e6, 27e6),
    frame_hz=st.floats(26.0, 300.0),
    pulses=st.lists(st.floats(500.0, 2500.0), min_size=16, max_size=16),
)
def test_any_oscillator_any_rate_error_is_half_a_count(
    oscillator_hz: float, frame_hz: float, pulses: list[float]
) -> None:
    settings_ = board(oscillator_hz=oscillator_hz, frame_hz=frame_hz)
    clock = ManualClock()
    driver = ModelledPca9685Driver([settings_], outputs(range(16)), clock=clock, sleep=clock.sleep)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("time.sleep", clock.sleep)
        driver.open()
    chip = driver.chips["main"]
    # the nearest rate that the chip has, and a count of just that frame
    prescale = chip.registers[r.PRE_SCALE]
    errors = [abs(oscillator_hz / 4096 / frame_hz - (p + 1)) for p in (prescale - 1, prescale, prescale + 1)]
    assert errors[1] <= min(errors) + 1e-9
    driver.write(pulses)
    half_count_us = 0.5 * (prescale + 1) / oscillator_hz * 1e6
    for got, wanted in zip(chip.sending_us(), pulses, strict=True):
        assert got is not None
        assert abs(got - wanted) <= half_count_us * (1 + 1e-9)
    assert chip.equal_counts == 0


# ---- frames on the wire


def least_bytes(channels: Sequence[int]) -> int:
    """What the chip allows at the least for new pulses on these channels, found by trying every way.

    ON counts need not be sent again: a message runs from OFF_L of its first
    channel to OFF_H of its last by auto-increment, after an address and a
    register byte.
    """
    best = [0] + [10**9] * len(channels)
    for end in range(1, len(channels) + 1):
        for start in range(end):
            span = channels[end - 1] - channels[start]
            best[end] = min(best[end], best[start] + 2 + 2 + 4 * span)
    return best[-1]


@pytest.mark.parametrize(
    "channels",
    [range(12), range(9), range(4, 16), [0, 1, 2, 4, 5, 6, 8, 9, 10, 12, 13, 14], range(16)],
)
def test_one_transaction_a_board_of_the_least_bytes(clock: ManualClock, channels: Sequence[int]) -> None:
    driver, bus, chip = opened(clock, channels)
    before = bus.bytes, bus.transactions
    driver.write([1500.0 + n for n in range(len(channels))])
    assert bus.transactions - before[1] == 1
    assert bus.bytes - before[0] == least_bytes(channels)
    assert [n for n, width in enumerate(chip.sending_us()) if width is not None] == sorted(channels)


def test_twelve_channels_in_a_row_take_one_message_of_48_bytes(clock: ManualClock) -> None:
    """Whole channels would be 50 bytes (address, register, 12 times 4); the first ON count is left out."""
    driver, bus, _ = opened(clock)
    before = bus.clocks
    driver.write([1500.0] * 12)
    assert [(message.address, len(message.data)) for message in bus.log[-1]] == [(0x40, 47)]
    assert bus.clocks - before == 9 * 48
    assert least_bytes(range(12)) == 48


def test_smbus_blocks_end_at_32_bytes_and_hold_whole_channels(clock: ManualClock) -> None:
    driver, bus, _ = opened(clock, plain_i2c=False)
    driver.write([1500.0] * 12)
    blocks = [message.data for transaction in bus.log for message in transaction]
    assert [(block[0], len(block) - 1) for block in blocks] == [(0x08, 30), (0x08 + 32, 14)]


def test_pulses_start_spread_over_the_frame(clock: ManualClock) -> None:
    driver, _, chip = opened(clock)
    driver.write([1500.0] * 12)
    clock.sleep(10 * FRAME_S)
    rises = {pulse.channel: pulse.rise_s for pulse in chip.seen()}
    phases = sorted((rise_s - rises[0]) / chip.frame_s % 1.0 for rise_s in rises.values())
    steps = [b - a for a, b in zip(phases, [*phases[1:], phases[0] + 1.0], strict=True)]
    assert steps == pytest.approx([1 / 12] * 12, abs=2e-3)


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_no_pulse_is_cut_or_doubled_whatever_is_written_when(data: st.DataObject) -> None:
    clock = ManualClock()
    driver = ModelledPca9685Driver(
        [board()], outputs(range(8)), clock=clock, sleep=clock.sleep, plain_i2c=data.draw(st.booleans())
    )
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("time.sleep", clock.sleep)
        driver.open()
        chip = driver.chips["main"]
        sent_us = set()
        pulse = st.one_of(st.none(), st.floats(500.0, 2500.0))
        for _ in range(data.draw(st.integers(1, 30))):
            action = data.draw(st.sampled_from(["write"] * 8 + ["release", "open"]))
            if action == "write":
                driver.write(data.draw(st.lists(pulse, min_size=8, max_size=8)))
                sent_us |= {round(us, 2) for us in chip.sending_us() if us is not None}
            elif action == "release":
                driver.release()
            else:
                driver.open()
            clock.sleep(data.draw(st.floats(0.0, 0.05)))
    driver.release()
    clock.sleep(0.1)
    assert chip.cut() == []
    assert chip.doubled() == []
    assert chip.equal_counts == 0
    assert chip.early_writes == 0
    assert {round(seen.width_us, 2) for seen in chip.seen()} <= sent_us  # none that nobody asked for


# ---- read-back


def test_a_brown_out_is_found_and_answered_without_a_pulse(clock: ManualClock) -> None:
    driver, _, chip = opened(clock)
    driver.write([1500.0] * 12)
    clock.sleep(0.1)
    assert driver.health().settings_kept
    chip.registers[r.led_on_l(0)] ^= 0x40  # noise on the wires; the only count that no frame repairs
    assert "LED0_ON is 0x0040, was set to 0x0000" in driver.health().detail
    chip.reset()
    health = driver.health()
    assert not health.settings_kept
    assert "board main: MODE1 is 0x11, was set to 0x20" in health.detail
    assert "supply" in health.detail
    driver.write([1500.0] * 12)  # into a chip that sleeps and does not count registers up
    clock.sleep(0.1)
    assert chip.sending_us() == [None] * 16
    driver.open()
    assert driver.health().settings_kept
    assert chip.sending_us() == [None] * 16
    driver.write([1500.0] * 12)
    assert chip.sending_us()[:12] != [None] * 12


def test_a_board_that_does_not_keep_its_settings_is_refused(clock: ManualClock) -> None:
    driver = ModelledPca9685Driver([board()], outputs(), clock=clock, sleep=clock.sleep)
    chip = driver.chips["main"]
    chip.write(bytes((0, r.SLEEP)))
    chip.write(bytes((0, r.SLEEP | r.EXTCLK)))  # sticks until power is cycled
    with pytest.raises(SetupError, match=r"MODE1 is 0x60, was set to 0x20.*Switch its supply off and on"):
        driver.open()


# ---- errors


@pytest.mark.parametrize(
    ("number", "advice"),
    [
        (121, "power, its address pins"),
        (6, "power, its address pins"),
        (110, "wedged"),
        (5, "wires"),
        (13, "group i2c"),
        (16, "kernel module"),
        (2, "no such bus"),
    ],
)
def test_errors_say_board_address_errno_and_what_to_do(clock: ManualClock, number: int, advice: str) -> None:
    plan = FaultInjector()
    driver, _, _ = opened(clock, wrap_bus=plan.bus)
    plan.fail_next(number)
    with pytest.raises(BusError, match=advice) as caught:
        driver.write([1500.0] * 12)
    assert caught.value.errno == number
    assert caught.value.board == "main"
    assert isinstance(caught.value.__cause__, OSError)
    assert "board main" in str(caught.value)
    assert "0x40 on bus 1" in str(caught.value)


def test_a_missing_bus_is_errno_2() -> None:
    driver = Pca9685Driver([board(bus=99)], outputs())
    with pytest.raises(BusError, match="switch I2C on") as caught:
        driver.open()
    assert caught.value.errno == errno.ENOENT
    driver.close()


def two_boards(clock: ManualClock, **extra: Any) -> ModelledPca9685Driver:
    return ModelledPca9685Driver(
        [board("fore", 0x40, **extra), board("hind", 0x41, **extra)],
        outputs(range(4), "fore") + outputs(range(4), "hind"),
        clock=clock,
        sleep=clock.sleep,
    )


def test_release_tries_each_board_then_raises_and_writing_waits_for_open(clock: ManualClock) -> None:
    driver = two_boards(clock)
    driver.open()
    driver.write([1500.0] * 8)
    fore, bus = driver.chips["fore"], driver.buses[1]
    bus.devices.remove(fore)
    with pytest.raises(BusError, match="board fore"):
        driver.release()
    assert driver.chips["hind"].is_full_off()
    bus.devices.append(fore)
    with pytest.raises(SetupError, match="call open"):
        driver.write([1500.0] * 8)
    driver.open()
    assert fore.is_full_off()
    driver.write([1500.0] * 8)


def test_an_open_that_fails_ends_pulses_on_the_boards_that_are_there(clock: ManualClock) -> None:
    driver = two_boards(clock)
    driver.open()
    driver.write([1500.0] * 8)
    driver.buses[1].devices.remove(driver.chips["fore"])
    fresh = Pca9685Driver(
        driver.boards, driver.outputs, open_bus=lambda _: driver.buses[1], sleep=clock.sleep
    )
    with pytest.raises(BusError, match="board fore"):
        fresh.open()
    assert driver.chips["hind"].is_full_off()


def test_an_open_that_fails_lets_go_of_its_bus(clock: ManualClock) -> None:
    driver = two_boards(clock)
    driver.buses[1].devices.clear()
    with pytest.raises(BusError):
        driver.open()
    assert driver.buses[1].handles == 0
    driver.close()
    assert driver.buses[1].handles == 0


def test_close_lets_go_though_ending_pulses_fails(clock: ManualClock) -> None:
    driver, bus, _ = opened(clock)
    bus.devices.clear()
    with pytest.raises(BusError):
        driver.close()
    assert bus.handles == 0
    driver.close()


@pytest.mark.parametrize("at", range(1, 16))
def test_whichever_transfer_of_open_fails_it_raises_and_no_output_is_on(clock: ManualClock, at: int) -> None:
    plan = FaultInjector()
    plan.fail(at, errno.EREMOTEIO, count=2)
    driver = ModelledPca9685Driver([board()], outputs(), clock=clock, sleep=clock.sleep, wrap_bus=plan.bus)
    with pytest.raises((BusError, SetupError)):
        driver.open()
    clock.sleep(1.0)
    assert driver.chips["main"].seen() == []
    plan.clear()
    driver.open()
    driver.write([1500.0] * 12)


def test_an_adapter_that_can_do_neither_is_refused(clock: ManualClock) -> None:
    driver = ModelledPca9685Driver([board()], outputs(), clock=clock, sleep=clock.sleep)
    driver.buses[1].funcs = 0x00060000
    with pytest.raises(SetupError, match="neither plain I2C nor SMBus blocks"):
        driver.open()


@pytest.mark.parametrize("frame_hz", [20.0, 1700.0, 1e-9, 1e9])
def test_frame_rates_the_chip_does_not_have_are_refused(frame_hz: float) -> None:
    with pytest.raises(SettingsError, match=r"its chip can do 23\.8 to 1526 Hz"):
        Pca9685Driver([board(frame_hz=frame_hz)], outputs())


def test_pulses_longer_than_the_frame_are_refused() -> None:
    with pytest.raises(SettingsError, match=r"channel 0: limits 500.0 to 2500.0 us.*can be sent"):
        Pca9685Driver([board(frame_hz=450.0)], outputs())


# ---- the output-enable line


class Line(OutputLine):
    """Keeps what it was told."""

    def __init__(self, happened: list[str]) -> None:
        self.happened = happened

    def set(self, high: bool) -> None:
        self.happened.append("high" if high else "low")

    def close(self) -> None:
        self.happened.append("closed")


class Wired:
    """An open board that pulses, whose /OE is wired; `happened` has what line, bus and sleep did, in turn."""

    def __init__(self, clock: ManualClock) -> None:
        model = ModelledPca9685Driver([board()], outputs(), clock=clock, sleep=clock.sleep)
        bus = model.buses[1]
        self.happened: list[str] = []
        self.plan = FaultInjector()
        self.plan.call(1, lambda: self.happened.append("bus"), count=None)

        def open_bus(_: int) -> SmBus:
            bus.open()
            return self.plan.bus(bus)

        def sleep(seconds: float) -> None:
            clock.sleep(seconds)
            self.happened.append("frame" if seconds > 0.999 * FRAME_S else "wait")

        self.driver = Pca9685Driver(
            [board(output_enable=("gpiochip0", 17))],
            outputs(),
            open_bus=open_bus,
            open_line=lambda *_: Line(self.happened),
            sleep=sleep,
        )
        self.driver.open()
        self.opening = self.happened[:]
        self.driver.write([1500.0] * 12)
        self.happened.clear()


def test_oe_is_high_before_the_bus_is_used_and_low_once_all_is_off(clock: ManualClock) -> None:
    opening = Wired(clock).opening
    assert opening[0] == "high"
    assert opening[-1] == "low"
    assert opening.count("low") == 1


def test_a_release_lets_the_pulses_under_way_end_before_oe_is_high(clock: ManualClock) -> None:
    wired = Wired(clock)
    wired.driver.release()
    assert wired.happened == ["bus", "frame", "high"]
    wired.driver.release()
    assert wired.happened[3:] == ["bus", "high"]
    wired.driver.write([1500.0] * 12)
    assert wired.happened[5:] == ["low", "bus"]
    wired.driver.close()
    assert wired.happened[7:] == ["bus", "frame", "high", "closed"]


def test_a_release_that_fails_leaves_oe_high_until_open(clock: ManualClock) -> None:
    wired = Wired(clock)
    wired.plan.fail_next(errno.ETIMEDOUT, count=None)
    with pytest.raises(BusError):
        wired.driver.release()
    assert wired.happened == ["bus", "high"]
    wired.plan.clear()
    with pytest.raises(SetupError):
        wired.driver.write([1500.0] * 12)  # it may still pulse behind the line
    assert "low" not in wired.happened
    wired.driver.open()
    assert wired.happened[-1] == "low"


@pytest.mark.parametrize("call", ["write", "first write", "release", "health", "open", "close"])
def test_oe_is_cut_at_once_while_any_transfer_hangs_and_stays_high(clock: ManualClock, call: str) -> None:
    wired = Wired(clock)
    driver = wired.driver
    calls: dict[str, Callable[[], object]] = {
        "write": lambda: driver.write([1500.0] * 12),
        "first write": lambda: driver.write([1500.0] * 12),
        "release": driver.release,
        "health": driver.health,
        "open": driver.open,
        "close": driver.close,
    }
    if call == "first write":
        driver.release()

    def hang() -> None:
        """What holds the transfer up is over once another thread has cut."""
        thread = Thread(target=driver.cut, daemon=True)
        wired.happened.append("hangs")
        thread.start()
        thread.join(WAIT_S)
        assert not thread.is_alive(), "the cut waits for the transfer"

    wired.plan.call_next(hang)
    calls[call]()
    after = wired.happened[wired.happened.index("hangs") :]
    assert after[1] == "high"
    assert "low" not in after
    if call != "close":
        driver.release()
        driver.write([1500.0] * 12)
        assert wired.happened[-2:] == ["low", "bus"]


def test_a_cut_that_meets_the_line_on_its_way_down_has_the_last_word(clock: ManualClock) -> None:
    wired = Wired(clock)
    wired.driver.release()
    thread = Thread(target=wired.driver.cut, daemon=True)

    class Slow(Line):
        def set(self, high: bool) -> None:
            if not high:
                thread.start()
                thread.join(0.1)  # were it free to go before, it would be done by then
            super().set(high)

    wired.driver._lines = {("gpiochip0", 17): Slow(wired.happened)}
    wired.driver.write([1500.0] * 12)
    thread.join(WAIT_S)
    assert "low" in wired.happened
    assert [word for word in wired.happened if word in ("high", "low")][-1] == "high"


def test_every_oe_line_is_tried_though_one_fails(clock: ManualClock) -> None:
    class Broken(Line):
        def set(self, high: bool) -> None:
            super().set(high)
            if broken:
                raise BusError(errno.EIO, "gone", "gpiochip0 line 17", "GPIO")

    broken = False
    told: dict[int, list[str]] = {17: [], 18: []}
    model = two_boards(clock)
    model.buses[1].open()
    driver = Pca9685Driver(
        [
            board("fore", 0x40, output_enable=("gpiochip0", 17)),
            board("hind", 0x41, output_enable=("gpiochip0", 18)),
        ],
        model.outputs,
        open_bus=lambda _: model.buses[1],
        open_line=lambda _, line: (Broken if line == 17 else Line)(told[line]),
        sleep=clock.sleep,
    )
    driver.open()
    driver.write([1500.0] * 8)
    broken = True
    for call in (driver.cut, driver.release):
        told[18].clear()
        with pytest.raises(BusError, match="line 17"):
            call()
        assert told[18] == ["high"]
    assert model.chips["fore"].is_full_off()
    with pytest.raises(SetupError):  # as long as nobody knows what the line does
        driver.write([1500.0] * 8)


def test_boards_may_share_an_oe_line(clock: ManualClock) -> None:
    driver = two_boards(clock, output_enable=("gpiochip0", 17))
    driver.open()
    driver.write([1500.0] * 8)
    driver.buses[1].devices.clear()
    assert driver.chips["hind"].sending_us()[0] is not None
    with pytest.raises(BusError):
        driver.release()
    for chip in driver.chips.values():
        assert chip.sending_us() == [None] * 16


# ---- libraries


def run_python(code: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)


DRIVE = """
import sys
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import BoardSettings, Output
board = BoardSettings(name="main", bus=1, address=0x40, frame_hz=50.0)
driver = ModelledPca9685Driver([board], [Output(board="main", channel=0, min_us=500.0, max_us=2500.0)])
"""


def test_opening_detects_no_board() -> None:
    code = (
        DRIVE
        + """
driver.open()
assert "adafruit_pca9685" in sys.modules
bad = [name for name in sys.modules if name.split(".")[0] in
       ("board", "busio", "digitalio", "microcontroller", "adafruit_blinka", "adafruit_platformdetect")]
assert not bad, bad
"""
    )
    result = run_python(code)
    assert result.returncode == 0, result.stderr


def test_no_hardware_library_is_imported_before_open() -> None:
    code = (
        DRIVE
        + """
import hobnail_drivers.supply, hobnail_drivers.contact, hobnail_drivers.gpio, hobnail_drivers.release
bad = [name for name in sys.modules if name.split(".")[0] in ("smbus2", "adafruit_pca9685", "gpiod")]
assert not bad, bad
"""
    )
    result = run_python(code)
    assert result.returncode == 0, result.stderr


@pytest.mark.parametrize(
    ("module", "distribution"),
    [("smbus2", "smbus2"), ("adafruit_pca9685", "adafruit-circuitpython-pca9685")],
)
def test_a_missing_library_says_what_to_install(
    monkeypatch: pytest.MonkeyPatch, clock: ManualClock, module: str, distribution: str
) -> None:
    monkeypatch.setitem(sys.modules, module, None)
    driver = ModelledPca9685Driver([board()], outputs(), clock=clock, sleep=clock.sleep)
    with pytest.raises(MissingLibraryError, match=rf"pip install {distribution}"):
        driver.open()


# ---- no outputs, many boards


def test_a_board_without_outputs_is_set_up_and_left_alone(clock: ManualClock) -> None:
    driver = ModelledPca9685Driver(
        [board("fore"), board("hind", 0x41)], outputs(range(4), "fore"), clock=clock, sleep=clock.sleep
    )
    driver.open()
    before = driver.buses[1].transactions
    driver.write([1500.0] * 4)
    assert driver.buses[1].transactions - before == 1


def test_one_transaction_for_each_of_two_boards(clock: ManualClock) -> None:
    driver = two_boards(clock)
    driver.open()
    before = driver.buses[1].transactions
    driver.write([1500.0] * 8)
    assert driver.buses[1].transactions - before == 2
    assert not any(math.isinf(us or 0.0) for chip in driver.chips.values() for us in chip.sending_us())
