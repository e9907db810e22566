"""How long a frame takes from pulses to the bytes handed to the bus, twelve servos on one board.

The bus takes the message and does nothing, as no adapter is that fast.  Shown
beside the same twelve pulses through the chip library, one channel at a time.
Run: python tests/benchmarks/frame_to_wire.py
"""

from __future__ import annotations

import statistics
import timeit
from collections.abc import Callable, Sequence
from functools import partial
from typing import Any

from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.contract import BoardSettings, Output
from hobnail_drivers.i2c import RegisterBus, SmBus
from hobnail_drivers.libraries import load_pwm_chip
from hobnail_drivers.simulated import SimulatedDriver

BOARD = BoardSettings(name="main", bus=1, address=0x40, frame_hz=50.0)
OUTPUTS = [Output(board="main", channel=channel, min_us=500.0, max_us=2500.0) for channel in range(12)]
FRAMES = tuple([1000.0 + 80.0 * ((n + k) % 12) for n in range(12)] for k in range(12))
ROUNDS = 3000


class DeafBus(BusModel):
    """Open like any bus, then takes every message without looking at it."""

    deaf = False

    def i2c_rdwr(self, *messages: Any) -> None:
        if not self.deaf:
            super().i2c_rdwr(*messages)


def median_us(call: Callable[[Sequence[float]], object]) -> float:
    """Median time of one call, us."""
    times = [timeit.timeit(partial(call, frame), number=ROUNDS) for frame in FRAMES]
    return statistics.median(times) / ROUNDS * 1e6


def main() -> None:
    """Measure and print."""
    deaf: list[DeafBus] = []

    def wrap(bus: SmBus) -> SmBus:
        assert isinstance(bus, BusModel)
        deaf.append(DeafBus(bus.devices))
        return deaf[-1]

    driver = ModelledPca9685Driver([BOARD], OUTPUTS, wrap_bus=wrap)
    driver.open()
    library = load_pwm_chip().PCA9685(RegisterBus(deaf[0]), address=BOARD.address)
    before = deaf[0].bytes
    driver.write(FRAMES[0])
    print(f"bytes a frame             {deaf[0].bytes - before:6d}   (least the chip allows: 48)")
    deaf[0].deaf = True

    def through_library(frame: Sequence[float]) -> None:
        for channel, pulse_us in enumerate(frame):
            library.channels[channel].duty_cycle = int(pulse_us * 3.2768)

    simulated = SimulatedDriver([BOARD], OUTPUTS)
    simulated.open()
    modelled = ModelledPca9685Driver([BOARD], OUTPUTS)
    modelled.open()
    mine_us, its_us = median_us(driver.write), median_us(through_library)
    print(f"Pca9685Driver.write       {mine_us:6.2f} us")
    print(f"the library, by channel   {its_us:6.2f} us   ratio {mine_us / its_us:.3f}")
    print(f"SimulatedDriver.write     {median_us(simulated.write):6.2f} us")
    print(f"chip model, all included  {median_us(modelled.write):6.2f} us")


if __name__ == "__main__":
    main()
