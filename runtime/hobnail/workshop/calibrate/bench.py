"""The driver on the bench: one joint has a pulse, and moves slowly; us, s.

However it is left, every pulse ends.  Errors of the driver come out as
DriverUnavailableError.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import replace
from types import TracebackType
from typing import Self

from hobnail.errors import DriverUnavailableError
from hobnail.robot import Joint, Robot
from hobnail.servo import JointMap
from hobnail_drivers.contract import Driver
from hobnail_drivers.errors import DriverError

PACE_RAD_S = math.radians(20.0)  # and never more than a tenth of what the servo can
PACE_SHARE = 0.1
FRAME_S = 0.02
RELEASE_TRIES = 3
SETTLE_S = 0.6  # for a first pulse: an unhurried servo's way over half of its travel


class JointBench:
    """A driver with one joint awake at a time; a context manager that opens and closes it.

    `driver` is made for the robot; its outputs' limits are the last guard
    against a pulse that must not be.
    """

    def __init__(
        self,
        driver: Driver,
        robot: Robot,
        *,
        sleep: Callable[[float], object] = time.sleep,
    ) -> None:
        self._driver = driver
        self._sleep = sleep
        self._index = {joint.name: number for number, joint in enumerate(robot.joints)}
        self._paces_us_s = []
        for joint in robot.joints:
            us_per_rad = max(abs(slope) for _, slope in JointMap(joint).pieces)
            pace = min(PACE_RAD_S, PACE_SHARE * joint.servo.speed_rad_s)
            self._paces_us_s.append(pace * us_per_rad)
        self._awake: int | None = None
        self._pulse_us = 0.0

    def __enter__(self) -> Self:
        with _told():
            self._driver.open()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._awake = None
        try:
            self._release()
        except (KeyboardInterrupt, SystemExit):  # once more, for it may have come in the middle
            self._release()
            raise
        finally:
            with suppress(DriverError):
                self._driver.close()

    def _release(self) -> None:
        """End every pulse, patiently.  Raises DriverUnavailableError."""
        for left in reversed(range(RELEASE_TRIES)):
            try:
                self._driver.release()
                return
            except DriverError as error:
                if not left:
                    raise DriverUnavailableError(
                        f"driver: {error}: the pulses could not be ended. Switch the servo supply off, then "
                        "run `hobnail-release`"
                    ) from error

    def wake(self, joint: str, pulse_us: float) -> None:
        """Give the joint, and no other, a pulse."""
        self._awake = self._index[joint]
        self._send(pulse_us)
        self._sleep(SETTLE_S)
        self._look()

    def move(self, pulse_us: float) -> None:
        """Turn the joint that is awake there, slowly."""
        assert self._awake is not None, "wake comes first"
        step_us = self._paces_us_s[self._awake] * FRAME_S
        start_us = self._pulse_us
        count = max(1, math.ceil(abs(pulse_us - start_us) / step_us))
        for number in range(1, count + 1):
            self._send(start_us + (pulse_us - start_us) * number / count)
            self._sleep(FRAME_S)
        self._look()

    def sleep(self) -> None:
        """End the pulses."""
        if self._awake is not None:
            self._awake = None
            with _told():
                self._driver.write([None] * len(self._index))

    def _send(self, pulse_us: float) -> None:
        pulses: list[float | None] = [None] * len(self._index)
        pulses[self._awake or 0] = pulse_us
        with _told():
            self._driver.write(pulses)
        self._pulse_us = pulse_us

    def _look(self) -> None:
        """A board that lost its settings pulses no more, or wrongly."""
        with _told():
            health = self._driver.health()
        if not health.settings_kept:
            raise DriverUnavailableError(f"the calibration ended: {health.detail}; what was kept stays kept")


def with_limits_of_both(calibrated: Robot, configured: Robot) -> Robot:
    """The calibrated robot with pulse limits that hold those of its configuration too: hard limits
    are measured anew within these."""

    def widened(joint: Joint, other: Joint) -> Joint:
        (low, high), (other_low, other_high) = joint.pulse_limits_us, other.pulse_limits_us
        return replace(joint, pulse_limits_us=(min(low, other_low), max(high, other_high)))

    legs = []
    for leg, other in zip(calibrated.legs, configured.legs, strict=True):
        roll, hip, knee = (widened(*pair) for pair in zip(leg.joints, other.joints, strict=True))
        legs.append(replace(leg, joints=(roll, hip, knee)))
    return replace(calibrated, legs=tuple(legs))


@contextmanager
def _told() -> Iterator[None]:
    try:
        yield
    except DriverError as error:
        raise DriverUnavailableError(f"driver: {error}") from error
