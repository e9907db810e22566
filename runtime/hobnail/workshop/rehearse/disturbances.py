"""What is made wrong on purpose in a rehearsal, in SI units; defaults are a sound robot on a flat floor.

`Disturbances.applied_to` gives the robot as it really is, while the controller keeps
believing in the robot as configured.  Floor, push, supply and lost frames are
read by the model, the plant and the back end.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, replace

import numpy as np

from hobnail.errors import CommandError
from hobnail.robot import Joint, Leg, Robot, Vec2, Vec3

DEFAULT_FRICTION = 0.8  # rubber on a dry hard floor; common practice: 0.6 to 1.0

# Allowed ranges, for the plain numbers; the unit is for the message.
_RANGES: dict[str, tuple[float, float, str]] = {
    "zero_error_rad": (0.0, 0.5, "rad"),
    "length_error_m": (0.0, 0.05, "m"),
    "slope_rad": (-0.6, 0.6, "rad"),
    "slope_heading_rad": (-7.0, 7.0, "rad"),
    "friction": (0.01, 5.0, ""),
    "roughness_m": (0.0, 0.1, "m"),
    "weak_servo": (0.0, 1.0, "share of the torque left"),
    "lost_frames": (0.0, 1.0, "share"),
    "push_at_s": (0.0, 1e4, "s"),
    "supply_ohm": (0.0, 5.0, "ohm"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Disturbances:
    """Injected errors.

    `zero_error_rad` and `length_error_m` are bounds: each joint's horn and each
    link gets its own error, drawn evenly within plus and minus the bound from
    `seed`.  `weak_servo` is the share of torque (and stiffness) left in
    `weak_joint`, the last joint of the robot when no name is given.
    `slope_heading_rad` is the direction of uphill, 0 = straight ahead.
    `push_ns` is a horizontal impulse (world frame) on the trunk, spread over
    0.1 s from `push_at_s` on.  `lost_frames` is the share of frames that end in
    a bus error.  `supply_v` replaces the nominal voltage; `supply_ohm` is the
    resistance of battery and wiring, across which the servos' own current drops.

    Raises CommandError when a value is out of its range.
    """

    zero_error_rad: float = 0.0
    length_error_m: float = 0.0
    battery_shift_m: Vec3 = (0.0, 0.0, 0.0)
    slope_rad: float = 0.0
    slope_heading_rad: float = 0.0
    friction: float = DEFAULT_FRICTION
    roughness_m: float = 0.0
    weak_servo: float = 1.0
    weak_joint: str = ""
    lost_frames: float = 0.0
    push_ns: Vec2 = (0.0, 0.0)
    push_at_s: float = 2.0
    supply_v: float | None = None
    supply_ohm: float = 0.0
    seed: int = 0

    def __post_init__(self) -> None:
        for name, (low, high, unit) in _RANGES.items():
            _require(name, getattr(self, name), low, high, unit)
        for shift in self.battery_shift_m:
            _require("battery_shift_m", shift, -0.5, 0.5, "m")
        for push in self.push_ns:
            _require("push_ns", push, -100.0, 100.0, "N s")
        if self.supply_v is not None:
            _require("supply_v", self.supply_v, 1.0, 60.0, "V")
        if self.seed < 0:
            raise CommandError(f"seed is {self.seed}; allowed: 0 and up")

    def applied_to(self, robot: Robot) -> Robot:
        """The robot as it really is: horns off, links long or short, battery moved.

        Raises CommandError when `weak_joint` is not a joint of this robot.
        """
        names = [joint.name for joint in robot.joints]
        if self.weak_joint and self.weak_joint not in names:
            raise CommandError(
                f"weak_joint is {self.weak_joint!r}; joints of {robot.name}: {', '.join(names)}"
            )
        weak = self.weak_joint or names[-1]
        # One stream an error kind, so that adding one kind leaves the draws of the others alone.
        zeros = np.random.default_rng((self.seed, 1))
        lengths = np.random.default_rng((self.seed, 2))

        def horn(joint: Joint) -> Joint:
            error = float(zeros.uniform(-self.zero_error_rad, self.zero_error_rad))
            servo = joint.servo
            if joint.name == weak and self.weak_servo < 1.0:
                stiffness = servo.stiffness_nm_rad
                servo = replace(
                    servo,
                    torque_nm=servo.torque_nm * self.weak_servo,
                    stiffness_nm_rad=None if stiffness is None else stiffness * self.weak_servo,
                )
            return replace(joint, servo=servo, trim_rad=joint.trim_rad + error)

        def cut(leg: Leg) -> Leg:
            d, upper, lower = lengths.uniform(-self.length_error_m, self.length_error_m, 3)
            roll, hip, knee = leg.joints
            return replace(
                leg,
                joints=(horn(roll), horn(hip), horn(knee)),
                abduction_m=leg.abduction_m + float(d),
                upper_m=leg.upper_m + float(upper),
                lower_m=leg.lower_m + float(lower),
            )

        x, y, z = (a + b for a, b in zip(robot.body.com_m, self.battery_shift_m, strict=True))
        return replace(
            robot, body=replace(robot.body, com_m=(x, y, z)), legs=tuple(cut(leg) for leg in robot.legs)
        )

    def described(self) -> dict[str, object]:
        """What differs from a sound robot on a flat floor, by name."""
        sound = Disturbances()
        return {
            field.name: getattr(self, field.name)
            for field in fields(self)
            if getattr(self, field.name) != getattr(sound, field.name)
        }


def _require(name: str, value: float, low: float, high: float, unit: str) -> None:
    if not (math.isfinite(value) and low <= value <= high):
        unit = f" {unit}" if unit else ""
        raise CommandError(f"{name} is {value}{unit}; allowed: {low} to {high}{unit}")
