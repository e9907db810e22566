"""The steps of a route, in m, rad and s, each in the frame in which it starts (x forward, y left).

Does not read files (`hobnail.service.route_file`) and does not walk (`hobnail.service.route`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from hobnail.robot import Robot, Vec2, Vec3


@dataclass(frozen=True, slots=True, kw_only=True)
class Move:
    """Walk along one arc: `twist` is (x m, y m, yaw rad), the step's start frame's constant
    body velocity over unit time.  A straight line and a turn on the spot are its limits."""

    twist: Vec3
    note: str = ""

    def describe(self) -> str:
        """What the step does, in words and in mm and degrees."""
        x, y, yaw = self.twist
        degrees = math.degrees(yaw)
        if yaw and (x or y):
            radius_mm = 1000 * math.hypot(x, y) / abs(yaw)
            text = f"arc of {radius_mm:.0f} mm radius, {degrees:+.0f} deg"
        elif yaw:
            text = f"turn {degrees:+.0f} deg"
        elif y and not x:
            text = f"{'left' if y > 0 else 'right'} {abs(y) * 1000:.0f} mm"
        else:
            text = f"{'forward' if x >= 0 else 'back'} {abs(x) * 1000:.0f} mm"
        return _noted(text, self.note)


@dataclass(frozen=True, slots=True, kw_only=True)
class Wait:
    """Stand still for `duration_s`, counted from when all feet are down."""

    duration_s: float
    note: str = ""

    def describe(self) -> str:
        """What the step does, in words."""
        return _noted(f"wait {self.duration_s:g} s", self.note)


@dataclass(frozen=True, slots=True, kw_only=True)
class Pose:
    """Take a posture, standing; None leaves a part as it is."""

    height_m: float | None = None
    roll_rad: float | None = None
    pitch_rad: float | None = None
    yaw_rad: float | None = None
    lean_m: Vec2 | None = None
    note: str = ""

    def changes(self) -> dict[str, object]:
        """Only the parts that change, as the controller's `posture` takes them."""
        parts: dict[str, object] = {
            "height_m": self.height_m,
            "roll_rad": self.roll_rad,
            "pitch_rad": self.pitch_rad,
            "yaw_rad": self.yaw_rad,
            "lean_m": self.lean_m,
        }
        return {name: value for name, value in parts.items() if value is not None}

    def describe(self) -> str:
        """What the step does, in words and in mm and degrees."""
        words = []
        if self.height_m is not None:
            words.append(f"height {self.height_m * 1000:.0f} mm")
        for name, angle in (("roll", self.roll_rad), ("pitch", self.pitch_rad), ("yaw", self.yaw_rad)):
            if angle is not None:
                words.append(f"{name} {math.degrees(angle):+.0f} deg")
        if self.lean_m is not None:
            words.append(f"lean {self.lean_m[0] * 1000:+.0f}, {self.lean_m[1] * 1000:+.0f} mm")
        return _noted("posture " + ", ".join(words), self.note)


@dataclass(frozen=True, slots=True, kw_only=True)
class ChangeGait:
    """Walk on with another of the robot's gaits."""

    name: str
    note: str = ""

    def describe(self) -> str:
        """What the step does, in words."""
        return _noted(f"gait {self.name}", self.note)


@dataclass(frozen=True, slots=True, kw_only=True)
class Speed:
    """Walk the steps after this one at `share` (0..1) of the certified envelope."""

    share: float
    note: str = ""

    def describe(self) -> str:
        """What the step does, in words."""
        return _noted(f"speed {self.share * 100:.0f} %", self.note)


Step = Move | Wait | Pose | ChangeGait | Speed


def misfits(step: Step, robot: Robot) -> list[tuple[str, tuple[str, str]]]:
    """What in a step this robot cannot do: (attribute, (what was found, what is allowed))."""
    if isinstance(step, ChangeGait):
        names = [gait.name for gait in robot.gaits]
        return [] if step.name in names else [("name", (f"gait {step.name}", " or ".join(names)))]
    if not isinstance(step, Pose):
        return []
    limits = robot.posture_limits
    found: list[tuple[str, tuple[str, str]]] = []
    low, high = (1000.0 * height for height in limits.height_m)
    if step.height_m is not None and not limits.height_m[0] <= step.height_m <= limits.height_m[1]:
        found.append(("height_m", (f"height {step.height_m * 1000:g} mm", f"{low:g} to {high:g} mm")))
    for name, angle, limit in (
        ("roll", step.roll_rad, limits.roll_rad),
        ("pitch", step.pitch_rad, limits.pitch_rad),
        ("yaw", step.yaw_rad, limits.yaw_rad),
    ):
        if angle is not None and abs(angle) > limit:
            most = math.degrees(limit)
            found.append(
                (f"{name}_rad", (f"{name} {math.degrees(angle):.4g} deg", f"{-most:.4g} to {most:.4g} deg"))
            )
    if step.lean_m is not None and math.hypot(*step.lean_m) > limits.lean_m:
        length, most = 1000 * math.hypot(*step.lean_m), 1000 * limits.lean_m
        found.append(("lean_m", (f"a lean of {length:.4g} mm", f"at most {most:.4g} mm in any direction")))
    return found


def _noted(text: str, note: str) -> str:
    return f"{text} ({note})" if note else text
