"""The fault injector: fails, delays or hangs chosen transfers of a driver or of a bus.

Counts transfers from 1: calls of a driver's `open`, `write`, `release`, `health`
and `close`, or calls of a bus.  What a delay or a hang does is up to the hook:
it may advance an injected clock, or wait for an event.  Corrupted data is not
modelled.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from typing import Any

from hobnail_drivers.contract import Driver, Health, Pulses
from hobnail_drivers.errors import BusError
from hobnail_drivers.i2c import ADVICE, SmBus

Fault = Callable[[], None]


class FaultInjector:
    """A plan of faults, and the count of transfers so far; put before one driver or some buses.

    Faults fall due by number; one that is set for every transfer from `first`
    on lasts until `clear`.
    """

    def __init__(self) -> None:
        self.transfers = 0
        self.injected = 0
        self._plan: list[tuple[int, int | None, Fault]] = []  # first, last, what happens

    def fail(self, first: int, errno: int, *, count: int | None = 1) -> None:
        """Transfers `first`, and `count` in all (None: without end), fail with that errno."""

        def fault() -> None:
            raise OSError(errno, os.strerror(errno))

        self.call(first, fault, count=count)

    def call(self, first: int, hook: Fault, *, count: int | None = 1) -> None:
        """Call `hook` before transfers `first`, and `count` in all, are passed on."""
        self._plan.append((first, None if count is None else first + count - 1, hook))

    def fail_next(self, errno: int, *, count: int | None = 1) -> None:
        """As `fail`, from the next transfer on."""
        self.fail(self.transfers + 1, errno, count=count)

    def call_next(self, hook: Fault, *, count: int | None = 1) -> None:
        """As `call`, from the next transfer on."""
        self.call(self.transfers + 1, hook, count=count)

    def clear(self) -> None:
        """No more faults."""
        self._plan.clear()

    def driver(self, inner: Driver) -> FaultyDriver:
        """`inner` behind this plan."""
        return FaultyDriver(inner, self)

    def bus(self, inner: SmBus) -> SmBus:
        """`inner` behind this plan."""
        return _FaultyBus(inner, self)

    def pass_one(self) -> None:
        """Count one transfer, and do to it what is planned; raises the OSError that is due."""
        self.transfers += 1
        for first, last, fault in list(self._plan):
            if first <= self.transfers and (last is None or self.transfers <= last):
                self.injected += 1
                fault()


class FaultyDriver(Driver):
    """Passes everything on to `inner`, when the plan lets it; `cut` always."""

    def __init__(self, inner: Driver, plan: FaultInjector) -> None:
        super().__init__(inner.boards, inner.outputs)
        self.inner = inner
        self.is_model = inner.is_model
        self._plan = plan

    def notes(self) -> tuple[str, ...]:
        return self.inner.notes()

    def _open(self) -> None:
        self._pass_one()
        self.inner.open()

    def _write(self, pulses_us: Pulses) -> None:
        self._pass_one()
        self.inner.write(pulses_us)

    def _release(self) -> None:
        self._pass_one()
        self.inner.release()

    def _cut(self) -> None:
        self.inner.cut()

    def _health(self) -> Health:
        self._pass_one()
        return self.inner.health()

    def _close(self) -> None:
        try:
            self._pass_one()
        finally:
            self.inner.close()

    def _pass_one(self) -> None:
        try:
            self._plan.pass_one()
        except OSError as error:
            number = error.errno or 0
            name = self.boards[0].name if self.boards else "(none)"
            raise BusError(number, f"injected: {ADVICE.get(number, error.strerror)}", name) from error


class _FaultyBus:
    """Passes everything on to `inner`, when the plan lets it; `close` always."""

    def __init__(self, inner: SmBus, plan: FaultInjector) -> None:
        self.inner = inner
        self._plan = plan

    @property
    def funcs(self) -> int:
        return self.inner.funcs

    def i2c_rdwr(self, *messages: Any) -> None:
        self._plan.pass_one()
        self.inner.i2c_rdwr(*messages)

    def read_byte(self, address: int, /) -> int:
        self._plan.pass_one()
        return self.inner.read_byte(address)

    def write_byte_data(self, address: int, register: int, value: int, /) -> None:
        self._plan.pass_one()
        self.inner.write_byte_data(address, register, value)

    def read_i2c_block_data(self, address: int, register: int, length: int, /) -> list[int]:
        self._plan.pass_one()
        return self.inner.read_i2c_block_data(address, register, length)

    def write_i2c_block_data(self, address: int, register: int, data: Sequence[int], /) -> None:
        self._plan.pass_one()
        self.inner.write_i2c_block_data(address, register, data)

    def close(self) -> None:
        self.inner.close()
