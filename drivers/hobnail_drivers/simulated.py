"""The simulated robot's servos: shaft positions in microseconds of pulse, on an injected clock.

Each servo turns at its speed towards its pulse and rests within its dead band;
pulses are quantised as a 12-bit PWM chip quantises them.  Every change of the
pulses is kept with its time.

Not modelled: load, torque, gravity, inertia, backlash and heat; the supply; the
frame (a pulse acts at once, not at the next frame); anything of a bus or a chip
(`chip_model` has those).  A servo without pulses stays where it is.
"""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable, Sequence
from typing import NamedTuple

from hobnail_drivers.contract import BoardSettings, Driver, Health, Output, Pulses

COUNTS = 4096  # steps of a frame, as in 12-bit PWM chips


class Transition(NamedTuple):
    """The pulses that hold from `time_s` on, one an output: us, None for no signal."""

    time_s: float
    pulses_us: tuple[float | None, ...]


class SimulatedDriver(Driver):
    """Servos with speed, dead band and quantisation, and a record of all that they were told.

    `transitions` holds the newest `history` changes; `dropped` counts older ones.
    Where a shaft stands is unknown until its first pulse, unless `place` said
    so.  A first pulse to an unplaced shaft is taken at its worst: the shaft lay
    at the hard limit farther from the pulse, and turns at full speed from there.
    """

    is_model = True

    def __init__(
        self,
        boards: Sequence[BoardSettings],
        outputs: Sequence[Output],
        *,
        argument: str = "",
        clock: Callable[[], float] = time.monotonic,
        history: int = 6000,
    ) -> None:
        """`clock` gives monotonic seconds.  Raises SettingsError."""
        super().__init__(boards, outputs, argument=argument)
        self.transitions: deque[Transition] = deque(maxlen=history)
        self.writes = 0
        self.dropped = 0
        frame_hz = {board.name: board.frame_hz for board in self.boards}
        self._steps_us = [1e6 / (frame_hz[output.board] * COUNTS) for output in self.outputs]
        self._dead_bands_us = [output.dead_band_us for output in self.outputs]
        self._speeds_us_s = [output.speed_us_s for output in self.outputs]
        self._none: tuple[float | None, ...] = (None,) * len(self.outputs)
        self._clock = clock
        self._targets: tuple[float | None, ...] = self._none
        self._shafts: list[float | None] = list(self._none)
        self._moved_s = clock()

    def place(self, output: int, position_us: float) -> None:
        """Put a shaft by hand where the pulse `position_us` would hold it."""
        self._move()
        self._shafts[output] = position_us

    def shaft_us(self, output: int) -> float | None:
        """Where that output's shaft is now, us of pulse; None while unknown."""
        self._move()
        return self._shafts[output]

    def shafts_us(self) -> tuple[float | None, ...]:
        """Where every shaft is now, us of pulse, in the order of the outputs; None while unknown."""
        self._move()
        return tuple(self._shafts)

    @property
    def pulses_us(self) -> tuple[float | None, ...]:
        """The pulses being sent now, quantised, us; None for no signal."""
        return self._targets

    def _open(self) -> None:
        self._set(self._none)

    def _write(self, pulses_us: Pulses) -> None:
        self.writes += 1
        self._set(
            tuple(
                [
                    None if pulse is None else int(pulse / step + 0.5) * step
                    for pulse, step in zip(pulses_us, self._steps_us, strict=True)
                ]
            )
        )

    def _release(self) -> None:
        self._set(self._none)

    def _health(self) -> Health:
        return Health(settings_kept=True, frame_hz={board.name: board.frame_hz for board in self.boards})

    def _close(self) -> None:
        self._set(self._none)

    def _set(self, targets: tuple[float | None, ...]) -> None:
        self._move()
        if targets == self._targets:
            return
        if None in self._shafts:
            self._take_worst(targets)
        self._targets = targets
        self.dropped += len(self.transitions) == self.transitions.maxlen
        self.transitions.append(Transition(self._moved_s, targets))

    def _take_worst(self, targets: tuple[float | None, ...]) -> None:
        """Shafts that get their first pulse now lay at the hard limit farther from it."""
        for index, (target, shaft) in enumerate(zip(targets, self._shafts, strict=True)):
            if target is not None and shaft is None:
                low, high = self._lows_us[index], self._highs_us[index]
                self._shafts[index] = low if target - low > high - target else high

    def _move(self) -> None:
        """Turn every shaft to where it is by now."""
        now_s = self._clock()
        dt_s = now_s - self._moved_s
        self._moved_s = now_s
        shafts: list[float | None] = []
        for target, shaft, band, speed in zip(
            self._targets, self._shafts, self._dead_bands_us, self._speeds_us_s, strict=True
        ):
            if target is not None and shaft is not None and not -band <= target - shaft <= band:
                step = speed * dt_s
                if target > shaft:
                    shaft = shaft + step if shaft + step < target - band else target - band
                else:
                    shaft = shaft - step if shaft - step > target + band else target + band
            shafts.append(shaft)
        self._shafts = shafts
