"""PCA9685 register addresses, bits and the arithmetic of its frame; Hz, us and counts.

All by the NXP data sheet, Rev. 4 (16 April 2015), sections 7.3.1 to 7.3.5.
Sends nothing.
"""

from __future__ import annotations

MODE1 = 0x00
MODE2 = 0x01
SUBADR1 = 0x02
SUBADR3 = 0x04
ALLCALLADR = 0x05
LED0_ON_L = 0x06
LED15_OFF_H = 0x45
ALL_LED_ON_L = 0xFA
ALL_LED_OFF_H = 0xFD
PRE_SCALE = 0xFE

# MODE1
RESTART = 0x80
EXTCLK = 0x40
AUTO_INCREMENT = 0x20
SLEEP = 0x10
SUB1 = 0x08
SUB2 = 0x04
SUB3 = 0x02
ALLCALL = 0x01

# MODE2
INVRT = 0x10
OCH = 0x08
OUTDRV = 0x04

FULL = 0x10  # bit 4 of LEDn_ON_H (always on) and of LEDn_OFF_H (always off)
FULL_16 = 0x1000  # the same bit in the two registers taken as one number

CHANNELS = 16
BYTES_A_CHANNEL = 4
COUNTS = 4096  # of one frame
OSCILLATOR_START_S = 500e-6  # at most, after SLEEP is cleared (sec. 7.3.1)
MIN_PRE_SCALE = 3
MAX_PRE_SCALE = 255

ALL_CALL_ADDRESS = 0x70  # 7 bits, as programmed at power-up
DEFAULT_ADDRESS = 0x40  # all address pins low
GENERAL_CALL = 0x00
SOFTWARE_RESET = 0x06

# Ends every pulse: full-off on all channels, in one byte of data, so that it
# does not matter whether the chip's auto-increment is on.
ALL_OFF = bytes((ALL_LED_OFF_H, FULL))


def led_on_l(channel: int) -> int:
    """Address of LEDn_ON_L; the other three registers of the channel follow it."""
    return LED0_ON_L + BYTES_A_CHANNEL * channel


def pre_scale(oscillator_hz: float, frame_hz: float) -> int:
    """The PRE_SCALE value for a frame rate: round(osc / (4096 rate)) - 1 (sec. 7.3.5).

    Not limited to what the register holds.
    """
    return int(oscillator_hz / COUNTS / frame_hz + 0.5) - 1


def true_frame_hz(oscillator_hz: float, prescale: int) -> float:
    """The frame rate that a PRE_SCALE value really gives."""
    return oscillator_hz / (COUNTS * (prescale + 1))
