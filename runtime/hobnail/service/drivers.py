"""Finding a driver by name, over the entry-point group `hobnail.drivers`, and the inputs beside it.

The only place where a driver gets its robot; pulses in us.  A name that is not
there is an error, never another driver.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from hobnail.errors import DriverUnavailableError
from hobnail.robot import Joint, Robot
from hobnail.servo import JointMap
from hobnail_drivers.contract import BoardSettings, Driver, Output
from hobnail_drivers.errors import DriverError

if TYPE_CHECKING:
    from hobnail_drivers.contact import Contact
    from hobnail_drivers.supply import SupplyMonitor

GROUP = "hobnail.drivers"


def open_driver(name: str, robot: Robot) -> Driver:
    """The driver of that name, made for the robot; not opened yet.

    `name` is a name from the entry-point group, or `name:argument`.
    Raises DriverUnavailableError.
    """
    kind, argument = find_driver(name)
    try:
        return make_driver(kind, robot, argument)
    except DriverError as error:
        raise DriverUnavailableError(f"driver {name.partition(':')[0]}: {error}") from error


def find_driver(name: str) -> tuple[type[Driver], str]:
    """The class of the driver of that name, and the argument in the name.  Raises DriverUnavailableError."""
    from importlib.metadata import entry_points  # slow to import, and needed only here

    key, _, argument = name.partition(":")
    found = {point.name: point for point in entry_points(group=GROUP)}
    if key not in found:
        known = ", ".join(sorted(found)) or "none: the package is not installed"
        raise DriverUnavailableError(f"there is no driver {key!r}; there are: {known}")
    try:
        kind: type[Driver] = found[key].load()
    except (ImportError, AttributeError, DriverError) as error:
        raise DriverUnavailableError(f"driver {key}: {error}") from error
    return kind, argument


def make_driver(kind: type[Driver], robot: Robot, argument: str = "") -> Driver:
    """A driver of that class, wired as the robot is.  Raises DriverError."""
    boards = tuple(
        BoardSettings(
            name=board.name,
            bus=board.bus,
            address=board.address,
            frame_hz=board.frame_hz,
            oscillator_hz=board.oscillator_hz,
            output_enable=board.output_enable,
        )
        for board in robot.boards
    )
    return kind(boards, tuple(output(joint) for joint in robot.joints), argument=argument)


def output(joint: Joint) -> Output:
    """The output that a joint's servo is on."""
    low_us, high_us = joint.pulse_limits_us
    joint_map = JointMap(joint)
    us_per_rad = max(abs(slope) for _, slope in joint_map.pieces)
    return Output(
        board=joint.board,
        channel=joint.channel,
        min_us=low_us,
        max_us=high_us,
        speed_us_s=joint.servo.speed_rad_s * us_per_rad,
        dead_band_us=joint.servo.dead_band_us,
    )


def open_monitor(robot: Robot) -> SupplyMonitor | None:
    """The supply monitor that the configuration names, None when it names none.

    Raises DriverUnavailableError.
    """
    supply = robot.supply
    if supply.monitor_bus is None:
        return None
    from hobnail_drivers.supply import Ina219

    try:
        return Ina219(supply.monitor_bus, supply.monitor_address)
    except (OSError, DriverError) as error:
        raise DriverUnavailableError(f"supply monitor: {error}") from error


def open_contact(robot: Robot) -> Contact | None:
    """The contact of the stop input that the configuration names, None when it names none.

    Raises DriverUnavailableError.
    """
    settings = robot.safety.stop_input
    if settings is None:
        return None
    from hobnail_drivers.contact import GpioContact

    try:
        return GpioContact(settings.chip, settings.line, settings.debounce_s)
    except (OSError, DriverError) as error:
        raise DriverUnavailableError(f"stop input: {error}") from error
