"""Inputs that can end the work: the supply's voltage and the stop contact; V and s.

Pure filters in time over what others read: a dip that lasts as long as a servo's
start is no empty battery, and a contact that bounces is no release.
"""

from __future__ import annotations

import math
from collections.abc import Callable

from hobnail.robot import StopInput, Supply

SMOOTH_S = 2.0  # time constant of the voltage's filter
RECOVERED = 1.03  # times the low limit: as much more, and the supply counts as good again


class SupplyWatch:
    """The smoothed voltage of the servo supply, and whether it is low."""

    def __init__(self, supply: Supply) -> None:
        self.volts = supply.nominal_v
        self.is_low = False
        self._low_v = supply.low_v
        self._last_s: float | None = None

    def update(self, reading_v: float | None, now_s: float) -> bool:
        """Take a reading; False when there is none, or it is no voltage."""
        if reading_v is None or not math.isfinite(reading_v) or reading_v <= 0.0:
            return False
        if self._last_s is not None:
            self.volts += (reading_v - self.volts) * -math.expm1((self._last_s - now_s) / SMOOTH_S)
        self._last_s = now_s
        if self._low_v is not None:
            self.is_low = self.volts < self._low_v * (RECOVERED if self.is_low else 1.0)
        return True

    @property
    def detail(self) -> str:
        """The voltage beside its limit."""
        return f"{self.volts:.2f} V, allowed at least {self._low_v or 0.0:.2f} V"


class StopInputWatch:
    """A normally-closed contact, debounced; a contact that cannot be read counts as open."""

    def __init__(self, settings: StopInput, read_closed: Callable[[], bool]) -> None:
        self.is_open = False
        self.detail = ""
        self._settings = settings
        self._read_closed = read_closed
        self._differs_since_s: float | None = None

    def update(self, now_s: float) -> None:
        """Read the contact once."""
        where = f"{self._settings.chip} line {self._settings.line}"
        try:
            is_open = not self._read_closed()
            self.detail = f"{where} is open"
        except Exception as error:  # noqa: BLE001 -- no reading, no trust
            is_open = True
            self.detail = f"{where} cannot be read: {error}"
        if is_open == self.is_open:
            self._differs_since_s = None
        elif self._differs_since_s is None:
            self._differs_since_s = now_s
        if self._differs_since_s is not None and now_s - self._differs_since_s >= self._settings.debounce_s:
            self.is_open = is_open
            self._differs_since_s = None
