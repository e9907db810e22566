"""The chip model against the NXP PCA9685 data sheet, Rev. 4 (16 April 2015).

Section, table and page numbers marked "memory" were not looked up again.
"""

from __future__ import annotations

import math

import pytest

from hobnail_drivers import registers as r
from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.conformance import ManualClock
from hobnail_drivers.pca9685_chip import Chip

ADDRESS = 0x40
FRAME_S = 4096 * (0x79 + 1) / 25e6  # at PRE_SCALE 0x79


class Bench:
    """One chip on a bus, with a clock to turn by hand."""

    def __init__(self) -> None:
        self.clock = ManualClock()
        self.chip = Chip(ADDRESS, clock=self.clock)
        self.bus = BusModel([self.chip])

    def put(self, *data: int) -> None:
        self.bus.transfer((ADDRESS, bytes(data)))

    def get(self, register: int, length: int = 1) -> list[int]:
        return list(self.bus.transfer((ADDRESS, bytes((register,))), (ADDRESS, length))[0])

    def start(self) -> None:
        """50 Hz, awake, auto-increment on, every output full off."""
        self.put(r.PRE_SCALE, 0x79)
        self.put(r.MODE1, r.AUTO_INCREMENT)
        self.clock.sleep(1e-3)

    def channel(self, number: int, rise: int, fall: int) -> None:
        self.put(r.led_on_l(number), rise & 0xFF, rise >> 8, fall & 0xFF, fall >> 8)

    def widths_us(self, number: int) -> list[float]:
        return [pulse.width_us for pulse in self.chip.seen() if pulse.channel == number]


@pytest.fixture
def bench() -> Bench:
    return Bench()


def counts_us(counts: int) -> float:
    return counts / 4096 * FRAME_S * 1e6


# ---- table 4, register summary: power-up values


def test_power_up_values(bench: Bench) -> None:
    assert bench.get(r.MODE1) == [0x11]
    assert bench.get(r.MODE2) == [0x04]
    assert [bench.get(register)[0] for register in (0x02, 0x03, 0x04, 0x05)] == [0xE2, 0xE4, 0xE8, 0xE0]
    for channel in range(16):
        first = 0x06 + 4 * channel
        assert [bench.get(first + byte)[0] for byte in range(4)] == [0x00, 0x00, 0x00, 0x10]
    assert bench.get(0xFE) == [0x1E]
    assert [bench.get(register)[0] for register in range(0xFA, 0xFE)] == [0, 0, 0, 0]


def test_register_addresses() -> None:
    assert r.led_on_l(0) == 0x06
    assert r.led_on_l(15) == 0x42  # table 4 (memory)
    assert (r.ALL_LED_ON_L, r.ALL_LED_OFF_H, r.PRE_SCALE) == (0xFA, 0xFD, 0xFE)


def test_no_pulse_after_power_up_even_once_awake(bench: Bench) -> None:
    bench.start()
    bench.clock.sleep(1.0)
    assert bench.chip.seen() == []
    assert bench.chip.sending_us() == [None] * 16


def test_all_led_registers_reach_every_channel_and_read_0(bench: Bench) -> None:
    bench.put(r.MODE1, r.AUTO_INCREMENT | r.SLEEP)
    bench.put(0xFA, 0x12, 0x03, 0x45, 0x06)
    for channel in range(16):
        assert bench.get(r.led_on_l(channel), 4) == [0x12, 0x03, 0x45, 0x06]
    assert bench.get(0xFA, 4) == [0, 0, 0, 0]


def test_auto_increment_wraps_from_0x45_to_0x00(bench: Bench) -> None:
    bench.put(r.MODE1, r.AUTO_INCREMENT | r.SLEEP)
    assert bench.get(0x44, 4) == [0x00, 0x10, r.AUTO_INCREMENT | r.SLEEP, 0x04]


def test_without_auto_increment_the_pointer_stays(bench: Bench) -> None:
    assert bench.get(r.MODE1, 3) == [0x11, 0x11, 0x11]
    bench.put(0x06, 1, 2, 3)
    assert [bench.get(register)[0] for register in (0x06, 0x07, 0x08)] == [3, 0, 0]


def test_reserved_bits_and_registers_take_nothing(bench: Bench) -> None:
    bench.put(r.MODE2, 0xFF)
    bench.put(0x05, 0xFF)
    bench.put(0x07, 0xFF)
    bench.put(0x46, 0xFF)
    assert bench.get(r.MODE2) == [0x1F]  # bits 7..5 reserved
    assert bench.get(0x05) == [0xFE]  # bit 0 of an address register is read-only
    assert bench.get(0x07) == [0x1F]
    assert bench.get(0x46) == [0]


# ---- sec. 7.3.5, PRE_SCALE


@pytest.mark.parametrize(
    ("frame_hz", "value", "true_hz"),
    [
        (200, 0x1E, 196.8876),
        (50, 121, 50.0288),
        (60, 101, None),
        (100, 60, None),
        (333, 17, 339.08),
        (1526, 3, None),
        (24, 253, None),
    ],
)
def test_prescale_of_a_25_mhz_chip(frame_hz: float, value: int, true_hz: float | None) -> None:
    assert r.pre_scale(25e6, frame_hz) == value
    if true_hz is not None:
        assert r.true_frame_hz(25e6, value) == pytest.approx(true_hz, abs=5e-3)


def test_the_ends_of_the_range() -> None:
    assert r.true_frame_hz(25e6, 3) == pytest.approx(1526, abs=0.5)
    assert r.true_frame_hz(25e6, 255) == pytest.approx(24, abs=0.5)


def test_prescale_is_written_only_while_asleep_and_is_at_least_3(bench: Bench) -> None:
    bench.put(r.PRE_SCALE, 1)
    assert bench.get(r.PRE_SCALE) == [3]
    bench.put(r.MODE1, 0x00)
    bench.put(r.PRE_SCALE, 0x79)
    assert bench.get(r.PRE_SCALE) == [3]
    bench.put(r.MODE1, r.SLEEP)
    bench.put(r.PRE_SCALE, 0x79)
    assert bench.get(r.PRE_SCALE) == [0x79]


# ---- sec. 7.3.3, outputs


@pytest.mark.parametrize(
    ("delay", "duty", "rise", "fall", "counts"),
    [
        (0.10, 0.20, 0x199, 0x4CC, 819),  # example 1, p. 17
        (0.90, 0.90, 0xE65, 0xCCB, 3686),  # example 2: wraps into the next frame
    ],
)
def test_worked_examples(bench: Bench, delay: float, duty: float, rise: int, fall: int, counts: int) -> None:
    assert (fall - rise) % 4096 == counts
    assert counts == round(duty * 4096)
    bench.start()
    origin_s = bench.clock.now_s - 1e-3 + 500e-6  # the counter starts with the oscillator
    bench.channel(0, rise, fall)
    bench.clock.sleep(3 * FRAME_S)
    first, *others = bench.chip.seen()
    assert first.width_us == pytest.approx(counts_us(counts))
    assert others
    assert (first.rise_s - origin_s) / FRAME_S % 1.0 == pytest.approx(
        delay, abs=1.5 / 4096
    )  # less 1, rounded
    assert others[0].rise_s - first.rise_s == pytest.approx(FRAME_S)


def test_full_off_wins_over_full_on(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0x1000, 0x1000)
    assert bench.chip.sending_us()[0] is None
    bench.channel(0, 0x1000, 0x0000)
    assert bench.chip.sending_us()[0] == math.inf


def test_equal_counts_are_told(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0x123, 0x123)
    assert bench.chip.equal_counts == 1


# ---- sec. 7.3.4 and 7.3.2: when new counts act


@pytest.mark.parametrize("at_share", [0.01, 0.05, 0.3, 0.7, 0.99])
def test_new_counts_cut_no_running_pulse(bench: Bench, at_share: float) -> None:
    bench.start()
    bench.channel(3, 100, 100 + 400)
    bench.clock.sleep(5 * FRAME_S)
    bench.clock.sleep((math.ceil(bench.clock.now_s / FRAME_S) + at_share) * FRAME_S - bench.clock.now_s)
    bench.channel(3, 100, 100 + 200)
    bench.clock.sleep(5 * FRAME_S)
    widths = bench.widths_us(3)
    assert {round(width, 3) for width in widths} == {round(counts_us(400), 3), round(counts_us(200), 3)}
    assert widths == sorted(widths, reverse=True)
    assert bench.chip.cut() == []
    assert bench.chip.doubled() == []


@pytest.mark.parametrize("at_share", [0.1, 0.3, 0.7])
@pytest.mark.parametrize("rises", [(1000, 100), (100, 1000)])
def test_a_moved_rise_doubles_no_pulse(bench: Bench, at_share: float, rises: tuple[int, int]) -> None:
    bench.start()
    bench.channel(3, rises[0], rises[0] + 500)
    bench.clock.sleep((3 + at_share) * FRAME_S)
    bench.channel(3, rises[1], rises[1] + 500)
    bench.clock.sleep(5 * FRAME_S)
    assert len(bench.chip.seen()) >= 5
    assert bench.chip.cut() == []
    assert bench.chip.doubled() == []


def test_full_off_lets_the_running_pulse_end(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0, 2048)
    bench.clock.sleep(2.25 * FRAME_S)
    running = len(bench.widths_us(0))
    bench.put(r.ALL_LED_OFF_H, r.FULL)
    bench.clock.sleep(5 * FRAME_S)
    assert bench.widths_us(0) == pytest.approx([counts_us(2048)] * (running + 1))
    assert bench.chip.cut() == []
    assert bench.chip.is_full_off()


def test_a_channel_that_is_halved_by_two_transactions_shows(bench: Bench) -> None:
    """The model can fail: OFF_L and OFF_H written apart give a pulse that nobody asked for."""
    bench.start()
    bench.channel(0, 0, 0x0FF)
    bench.clock.sleep(2 * FRAME_S)
    bench.put(0x08, 0x00)
    bench.clock.sleep(2 * FRAME_S)
    bench.put(0x09, 0x01)
    bench.clock.sleep(3 * FRAME_S)
    assert len({round(width, 3) for width in bench.widths_us(0)}) == 2  # 0xFF, none for 0x000, 0x100
    assert bench.chip.equal_counts == 1


def test_och_0_acts_at_stop(bench: Bench) -> None:
    bench.start()
    bench.chip.write(bytes((0x06, 0, 0, 0x00, 0x04)))
    bench.clock.sleep(2 * FRAME_S)
    assert bench.chip.seen() == []
    bench.chip.stop()
    bench.clock.sleep(2 * FRAME_S)
    assert bench.chip.seen() != []


def test_och_1_acts_when_all_four_registers_of_a_channel_are_there(bench: Bench) -> None:
    bench.put(r.MODE2, r.OUTDRV | r.OCH)
    bench.start()
    bench.chip.write(bytes((0x06, 0, 0, 0x00)))
    bench.clock.sleep(2 * FRAME_S)
    assert bench.chip.seen() == []
    bench.chip.write(bytes((0x09, 0x04)))
    bench.clock.sleep(2 * FRAME_S)
    assert bench.chip.seen() != []


# ---- sec. 7.3.1 and 7.3.1.1: sleep and RESTART


def test_writing_within_500_us_of_waking_is_told(bench: Bench) -> None:
    bench.put(r.MODE1, r.AUTO_INCREMENT)
    bench.clock.sleep(499e-6)
    bench.channel(0, 0, 100)
    assert bench.chip.early_writes == 4
    bench.clock.sleep(1e-6)
    bench.channel(0, 0, 100)
    assert bench.chip.early_writes == 4


def test_sleeping_while_pulsing_cuts_and_sets_restart(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0, 2048)
    bench.clock.sleep(3.25 * FRAME_S)
    bench.put(r.MODE1, r.AUTO_INCREMENT | r.SLEEP)
    assert len(bench.chip.cut()) == 1
    assert bench.get(r.MODE1) == [r.RESTART | r.AUTO_INCREMENT | r.SLEEP]


def test_restart_sequence_resumes_the_held_counts(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0, 2048)
    bench.clock.sleep(3.25 * FRAME_S)
    bench.put(r.MODE1, r.AUTO_INCREMENT | r.SLEEP)
    bench.put(r.MODE1, r.AUTO_INCREMENT)
    bench.clock.sleep(500e-6)
    before = len(bench.chip.seen())
    bench.clock.sleep(3 * FRAME_S)
    assert len(bench.chip.seen()) == before  # waits for RESTART
    assert bench.get(r.MODE1) == [r.RESTART | r.AUTO_INCREMENT]
    bench.put(r.MODE1, r.RESTART | r.AUTO_INCREMENT)
    bench.clock.sleep(3 * FRAME_S)
    assert bench.get(r.MODE1) == [r.AUTO_INCREMENT]
    assert bench.widths_us(0)[-1] == pytest.approx(counts_us(2048))
    assert len(bench.chip.seen()) > before


def test_an_orderly_shutdown_clears_restart(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0, 2048)
    bench.put(r.MODE1, r.AUTO_INCREMENT | r.SLEEP)
    assert bench.get(r.MODE1)[0] & r.RESTART
    bench.put(r.ALL_LED_OFF_H, r.FULL)
    assert not bench.get(r.MODE1)[0] & r.RESTART
    bench.put(r.MODE1, r.RESTART | r.AUTO_INCREMENT)
    bench.clock.sleep(3 * FRAME_S)
    assert bench.chip.sending_us() == [None] * 16


def test_sleeping_with_every_output_off_sets_no_restart(bench: Bench) -> None:
    bench.start()
    bench.put(r.MODE1, r.SLEEP)
    assert bench.get(r.MODE1) == [r.SLEEP]


def test_extclk_is_set_only_asleep_and_sticks(bench: Bench) -> None:
    bench.put(r.MODE1, r.EXTCLK)  # SLEEP does not stay set
    assert bench.get(r.MODE1) == [0]
    bench.put(r.MODE1, r.SLEEP)
    bench.put(r.MODE1, r.SLEEP | r.EXTCLK)
    bench.put(r.MODE1, 0)
    assert bench.get(r.MODE1) == [r.EXTCLK]
    bench.chip.reset()
    assert bench.get(r.MODE1) == [0x11]


# ---- addresses, resets, /OE


def test_all_call_and_sub_addresses(bench: Bench) -> None:
    assert [a for a in range(0x08, 0x78) if bench.chip.hears(a)] == [ADDRESS, 0x70]
    bench.put(r.MODE1, r.SLEEP | r.SUB1 | r.SUB2 | r.SUB3)
    assert [a for a in range(0x08, 0x78) if bench.chip.hears(a)] == [ADDRESS, 0x71, 0x72, 0x74]
    bench.put(0x02, 0xA0)
    assert bench.chip.hears(0x50)


def test_software_reset_hits_every_chip_on_the_bus() -> None:
    clock = ManualClock()
    chips = [Chip(address, clock=clock) for address in (0x40, 0x41)]
    bus = BusModel(chips)
    for address in (0x40, 0x41):
        bus.transfer((address, bytes((r.MODE1, r.AUTO_INCREMENT))))
        bus.transfer((address, bytes((0x06, 0, 0, 0, 8))))
    bus.transfer((0x00, b"\x06"))
    for chip in chips:
        assert chip.registers[r.MODE1] == 0x11
        assert chip.is_full_off()
    with pytest.raises(OSError, match="Remote I/O"):
        bus.transfer((0x00, b"\x05"))


def test_power_on_reset_in_the_middle_of_a_pulse(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0, 2048)
    bench.clock.sleep(3.25 * FRAME_S)
    bench.chip.reset()
    assert len(bench.chip.cut()) == 1
    assert bench.get(r.MODE1) == [0x11]
    bench.clock.sleep(1.0)
    assert bench.chip.sending_us() == [None] * 16


def test_output_enable_cuts_and_a_late_enable_gives_a_short_pulse(bench: Bench) -> None:
    bench.start()
    bench.channel(0, 0, 2048)
    bench.clock.sleep(3.25 * FRAME_S)
    bench.chip.enable(False)
    bench.clock.sleep(FRAME_S)
    seen = len(bench.chip.seen())
    assert len(bench.chip.cut()) == 1
    bench.chip.enable(True)
    bench.clock.sleep(FRAME_S)
    assert len(bench.chip.cut()) == 2
    assert len(bench.chip.seen()) > seen


# ---- the wire (UM10204, sec. 3.1.5: 9 clocks a byte)


def test_twelve_channels_in_one_burst(bench: Bench) -> None:
    bench.start()
    before = bench.bus.clocks
    bench.put(0x06, *([0] * 48))
    assert bench.bus.clocks - before == 450
    for kilohertz, milliseconds in ((100, 4.5), (400, 1.125), (1000, 0.45)):
        assert 450 / kilohertz == pytest.approx(milliseconds)


def test_nobody_answers_is_errno_121(bench: Bench) -> None:
    with pytest.raises(OSError, match="Remote I/O") as caught:
        bench.bus.transfer((0x41, b"\x00"))
    assert caught.value.errno == 121


def test_an_adapter_without_plain_i2c() -> None:
    bus = BusModel([Chip(ADDRESS, clock=ManualClock())], plain_i2c=False)
    with pytest.raises(OSError, match="not supported") as caught:
        bus.i2c_rdwr()
    assert caught.value.errno == 95
    bus.write_byte_data(ADDRESS, 0x00, 0x31)
    assert bus.read_byte_data(ADDRESS, 0x00) == 0x31
    bus.write_i2c_block_data(ADDRESS, 0x06, list(range(32)))
    assert bus.read_i2c_block_data(ADDRESS, 0x06, 2) == [0, 1]
    for length in (0, 33):
        with pytest.raises(ValueError, match="1 to 32"):
            bus.write_i2c_block_data(ADDRESS, 0x06, [0] * length)
