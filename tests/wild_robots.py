"""Configurations at random, as wild as the loader's bounds permit; mm, deg and kg as in the file.

A configuration is made of named draws, each with a tame value beside it and dice of
its own: when some names are tamed, all others stay as they are.  So what a failure
takes can be found by taming one name after another (`tamest`).  Many of the
configurations are refused by the loader; the others are robots that it promises can walk.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from random import Random
from tempfile import TemporaryDirectory
from typing import Any, TypeVar

import yaml

from hobnail.config import load_robot
from hobnail.errors import ConfigError
from hobnail.motion.gaits import fewest_feet_down
from hobnail.robot import Robot

T = TypeVar("T")
KGF_CM_NM = 0.0980665


class Dice:
    """Named draws: the wild value, or the tame one for the names in `tame`."""

    def __init__(self, seed: int, tame: Iterable[str] = ()) -> None:
        self.seed = seed
        self.tame = frozenset(tame)
        self.drawn: dict[str, object] = {}  # the wild ones, by name

    def _random(self, name: str) -> Random | None:
        """Dice for the name; None when it is tame."""
        return None if name in self.tame else Random(f"{self.seed}:{name}")

    def _keep(self, name: str, value: T) -> T:
        self.drawn[name] = value
        return value

    def number(self, name: str, tame: float, low: float, high: float) -> float:
        """Evenly from low to high."""
        random = self._random(name)
        return tame if random is None else self._keep(name, random.uniform(low, high))

    def scale(self, name: str, tame: float, low: float, high: float) -> float:
        """From low to high, evenly in its logarithm."""
        random = self._random(name)
        if random is None:
            return tame
        return self._keep(name, math.exp(random.uniform(math.log(low), math.log(high))))

    def choice(self, name: str, tame: T, options: Sequence[T]) -> T:
        """One of the options."""
        random = self._random(name)
        return tame if random is None else self._keep(name, random.choice(options))


def configuration(dice: Dice) -> dict[str, Any]:
    """A configuration as plain data, to be written as YAML."""
    reach = dice.scale("reach", 230.0, 25.0, 900.0)  # length of a leg
    count = dice.choice("legs", 4, (4, 4, 4, 5, 6, 6, 7, 8))
    height = reach * dice.number("height", 0.72, 0.45, 0.98)
    legs = _legs(dice, count, reach, height)
    hips = [leg["hip_mm"] for leg in legs]
    mass = min(max(1.4 * (reach / 230.0) ** 3 * dice.scale("mass", 1.0, 0.3, 8.0), 0.05), 50.0)
    rest = height * dice.number("rest", 0.6, 0.3, 0.95)
    lowest, highest = dice.number("lowest", 0.85, 0.5, 0.99), dice.number("highest", 1.06, 1.0, 1.2)
    forward = reach * dice.scale("forward", 0.5, 0.02, 4.0)
    turn = min(dice.scale("turn", 0.8, 0.05, 5.0), 10.0)
    return {
        "name": "wild",
        "period_ms": _round(dice.scale("period", 10.0, 5.0, 50.0)),
        "body": {
            "mass_kg": _round(mass),
            "com_mm": [
                _round(_within(500.0, reach * dice.number(f"com_{axis}", 0.0, -most, most)))
                for axis, most in (("x", 0.4), ("y", 0.2), ("z", 0.4))
            ],
            "size_mm": [_round(min(reach, 2000.0)) for _ in range(3)],
            "belly_mm": _round(min(rest * dice.number("belly", 0.8, 0.0, 1.0), 500.0)),
        },
        "supply": {"nominal_v": _round(6.0 * dice.number("nominal", 1.0, 0.7, 1.3))},
        "boards": [
            {"name": f"board{k}", "bus": 1, "address": 0x40 + k, "frame_hz": 50}
            for k in range((3 * count + 15) // 16)
        ],
        "servos": [_servo(dice, mass, reach)],
        "legs": legs,
        "stance": {
            "height_mm": _round(height),
            "rest_height_mm": _round(rest),
            "spread_mm": _round(_within(500.0, reach * dice.number("spread", 0.0, -0.1, 0.3))),
            "forward_mm": _round(_within(500.0, reach * dice.number("ahead", 0.0, -0.2, 0.2))),
        },
        "posture": {
            "height_mm": [_round(height * lowest), _round(height * highest)],
            "roll_deg": _round(dice.number("roll", 4.0, 0.0, 10.0)),
            "pitch_deg": _round(dice.number("pitch", 4.0, 0.0, 10.0)),
            "yaw_deg": _round(dice.number("yaw", 5.0, 0.0, 15.0)),
            "lean_mm": _round(min(reach * dice.number("lean", 0.05, 0.0, 0.1), 300.0)),
            "rate_mm_s": _round(_within(2000.0, reach * dice.scale("rate", 0.4, 0.02, 8.0), 1.0)),
            "rate_deg_s": _round(dice.scale("tilt_rate", 30.0, 2.0, 720.0)),
        },
        "gaits": _gaits(dice, hips, reach),
        "envelope": {
            "forward_m_s": _round(_within(5.0, forward / 1000.0, 0.01)),
            "sideways_m_s": _round(
                _within(5.0, forward / 1000.0 * dice.scale("sideways", 0.5, 0.1, 1.5), 0.01)
            ),
            "turn_rad_s": _round(turn),
            "acceleration_m_s2": _round(
                _within(20.0, reach / 1000.0 * dice.scale("acceleration", 2.5, 0.1, 60.0), 0.02)
            ),
            "turn_acceleration_rad_s2": _round(dice.scale("turn_acceleration", 2.5, 0.05, 50.0)),
        },
    }


def _legs(dice: Dice, count: int, reach: float, height: float) -> list[dict[str, Any]]:
    on_left = (count + 1) // 2
    upper_share = dice.number("upper_share", 0.46, 0.3, 0.7)
    pitch = reach * dice.number("pitch_of_hips", 1.0, 0.5, 2.0)
    half = reach * dice.number("half_width", 0.25, 0.1, 1.0)
    abduction = reach * dice.number("abduction", 0.15, 0.0, 0.5)
    radius = reach * dice.number("radius", 0.03, 0.0, 0.1)
    own_knees = dice.choice("own_knees", False, (False, False, True))
    knee = dice.choice("knee", "backward", ("backward", "forward"))
    own_lengths = dice.number("own_lengths", 0.0, 0.0, 0.2)
    own_hips = dice.number("own_hips", 0.0, 0.0, 0.25)
    kg = [
        min((reach / 230.0) ** 3 * dice.scale(f"{part}_kg", tame, 0.3 * tame, 5.0 * tame), 10.0)
        for part, tame in (("hip", 0.13), ("upper", 0.09), ("lower", 0.04))
    ]
    travel = [
        dice.number(f"{part}_travel", tame, 0.4 * tame, 1.3 * tame)
        for part, tame in (("roll", 45.0), ("hip", 75.0), ("knee", 75.0))
    ]
    legs = []
    for k in range(count):
        left = k < on_left
        row, rows = (k, on_left) if left else (k - on_left, count - on_left)
        length = reach * (1.0 + own_lengths * dice.number(f"length{k}", 0.0, -1.0, 1.0))
        bends = dice.choice(f"knee{k}", "backward", ("backward", "forward")) if own_knees else knee
        hip_x = pitch * (0.5 * (rows - 1) - row) + reach * own_hips * dice.number(f"hip_x{k}", 0.0, -1.0, 1.0)
        hip_y = half + 0.3 * reach * own_hips * dice.number(f"hip_y{k}", 0.0, -1.0, 1.0)
        hip_z = 0.3 * reach * own_hips * dice.number(f"hip_z{k}", 0.0, -1.0, 1.0)
        # The neutral leg: servos are mounted about it, more or less.
        depth = (height - radius + hip_z) / length
        bend = math.degrees(math.acos(_within(1.0, depth)))
        sign = 1.0 if bends == "forward" else -1.0
        joints = {}
        for j, (part, neutral) in enumerate(
            (("roll", 0.0), ("hip", -sign * bend), ("knee", 2.0 * sign * bend))
        ):
            low, high = neutral - travel[j], neutral + travel[j]
            if part == "knee":  # a knee does not bend to the other side
                low, high = (max(low, 2.0), high) if sign > 0.0 else (low, min(high, -2.0))
            off = dice.number("mounting", 0.0, -20.0, 20.0)
            joints[part] = {
                "servo": "servo",
                "board": f"board{(3 * k + j) // 16}",
                "channel": (3 * k + j) % 16,
                "direction": dice.choice(f"direction{k}{j}", 1, (1, -1)),
                "zero_deg": _round(_within(200.0, neutral + off)),
                "trim_deg": _round(dice.number(f"trim{k}{j}", 0.0, -8.0, 8.0)),
                "angle_limits_deg": [_round(_within(200.0, low)), _round(_within(200.0, high))],
            }
        legs.append(
            {
                "name": f"leg{k}",
                "hip_mm": [
                    _round(_within(2000.0, hip_x)),
                    _round((1.0 if left else -1.0) * _within(2000.0, hip_y, 2.0)),
                    _round(hip_z),
                ],
                "abduction_mm": _round(abduction),
                "upper_mm": _round(_within(1000.0, length * upper_share, 10.0)),
                "lower_mm": _round(_within(1000.0, length * (1.0 - upper_share), 10.0)),
                "knee_bends": bends,
                "foot_radius_mm": _round(min(radius, 100.0)),
                "hip_kg": _round(kg[0]),
                "upper_kg": _round(kg[1]),
                "lower_kg": _round(kg[2]),
                "joints": joints,
            }
        )
    return legs


def _servo(dice: Dice, mass_kg: float, reach_mm: float) -> dict[str, Any]:
    # Enough to hold half of the trunk at an arm of a third of the leg, times the draw.
    torque = 0.5 * mass_kg * 9.81 * reach_mm / 3000.0 * dice.scale("torque", 2.0, 0.3, 20.0) / KGF_CM_NM
    torque = _within(500.0, torque, 0.1)
    half = dice.choice("servo_travel", 135.0, (90.0, 135.0, 180.0))
    points = [[-half, 500.0], [half, 2500.0]]
    if dice.choice("bent_map", False, (False, True)):
        points[1:1] = [[-0.4 * half, 1000.0], [0.3 * half, 1900.0]]
    servo = {
        "name": "servo",
        "speed_s_per_60deg": _round(dice.scale("speed", 0.13, 0.03, 0.8)),
        "torque_kgf_cm": _round(torque),
        "rated_v": 6.0,
        "usable_speed": _round(dice.number("usable", 0.8, 0.3, 1.0)),
        "dead_band_us": _round(dice.number("dead_band", 3.0, 0.0, 20.0)),
        "pulse_map_deg_us": points,
        "pulse_limits_us": [520.0, 2480.0],
    }
    if dice.choice("stiff", True, (True, True, False)):
        stiffness = torque * KGF_CM_NM * dice.scale("stiffness", 12.0, 1.0, 80.0)
        servo["stiffness_nm_per_rad"] = _round(_within(1000.0, stiffness, 0.05))
    return servo


def _gaits(dice: Dice, hips: Sequence[Sequence[float]], reach: float) -> list[dict[str, Any]]:
    count = len(hips)
    lift = _within(300.0, reach * dice.number("lift", 0.1, 0.02, 0.3), 1.0)
    on_left = sum(hip[1] > 0.0 for hip in hips)
    built_in = ["trot", "crawl", "pace", "amble"] if count == 4 else ["tripod", "wave"]
    if 2 * on_left != count:
        built_in = []
    chosen = [
        name
        for name in built_in
        if dice.choice(f"has_{name}", name in ("trot", "crawl", "tripod"), (True, False))
    ]
    own = dice.choice("own_gaits", 0 if chosen else 1, (0, 1, 2) if chosen else (1, 2))
    gaits = [
        *({"name": name, "lift_mm": _round(lift), **_cycle(dice, name)} for name in chosen),
        *(_own_gait(dice, f"own{k}", count, lift) for k in range(own)),
    ]
    first = dice.choice("first_gait", 0, range(len(gaits)))
    return gaits[first:] + gaits[:first]


def _own_gait(dice: Dice, name: str, count: int, lift: float) -> dict[str, Any]:
    if dice.choice(f"{name}_even", True, (True, False)):
        order = list(range(count))
        Random(f"{dice.seed}:{name}_order").shuffle(order)
        phases = [_round(place / count) for place in order]
    else:
        phases = [_round(dice.number(f"{name}_phase{k}", k / count, 0.0, 0.999)) for k in range(count)]
    duty = dice.number(f"{name}_duty", 0.75, 0.35, 0.97)
    while fewest_feet_down(duty, phases) < 2 and duty < 0.98:
        duty = min(duty + 0.02, 0.98)
    gait: dict[str, Any] = {
        "name": name,
        "duty": _round(duty),
        "phases": phases,
        "lift_mm": _round(lift),
        "body_shift": _round(dice.number(f"{name}_shift", 0.0, 0.0, 1.0)),
        **_cycle(dice, name),
    }
    inner = dice.choice(f"{name}_keyframes", 0, (0, 0, 1, 2, 3, 5))
    if inner:
        times = sorted(
            _round(dice.number(f"{name}_time{k}", (k + 1) / (inner + 1), 0.05, 0.95)) for k in range(inner)
        )
        wild = dice.choice(f"{name}_wild_travel", False, (False, True))
        gait["swing"] = [
            {"time": 0, "travel": 0, "lift": 0},
            *(
                {
                    "time": time,
                    "travel": _round(
                        dice.number(f"{name}_travel{k}", time, *((-0.5, 1.5) if wild else (0.0, 1.0)))
                    ),
                    "lift": _round(dice.number(f"{name}_lift{k}", 1.0, 0.01, 1.5)),
                }
                for k, time in enumerate(times)
            ),
            {"time": 1, "travel": 1, "lift": 0},
        ]
    return gait


def _cycle(dice: Dice, name: str) -> dict[str, Any]:
    """Fixed or automatic, from very quick to very slow."""
    if dice.choice(f"{name}_auto", True, (True, True, False)):
        shortest = dice.scale(f"{name}_shortest", 0.5, 0.1, 5.0)
        longest = min(shortest * dice.scale(f"{name}_longest", 4.0, 1.05, 20.0), 20.0)
        return {"cycle_s": "auto", "cycle_range_s": [_round(shortest), _round(longest)]}
    return {"cycle_s": _round(dice.scale(f"{name}_cycle", 1.0, 0.15, 20.0))}


def _within(most: float, value: float, least: float | None = None) -> float:
    return min(max(value, -most if least is None else least), most)


def _round(value: float) -> float:
    """Few enough digits for the file to be read."""
    return float(f"{value:.3f}") if abs(value) >= 1.0 else float(f"{value:.4f}")


def text_of(data: dict[str, Any]) -> str:
    """The configuration as YAML."""
    return str(yaml.dump(data, sort_keys=False, default_flow_style=None, width=120))


def loaded(text: str) -> Robot:
    """The robot of a configuration; raises ConfigError."""
    with TemporaryDirectory(prefix="wild-") as folder:
        path = Path(folder) / "wild.yaml"
        path.write_text(text)
        return load_robot(path)


def wild_robot(dice: Dice) -> Robot | None:
    """The robot of those draws; None when the loader refuses it."""
    try:
        return loaded(text_of(configuration(dice)))
    except ConfigError:
        return None


def tamest(seed: int, fails: Callable[[Robot], bool]) -> Dice:
    """The draws of a robot that fails with as many of them tame as can be, one by one."""
    dice = Dice(seed)
    configuration(dice)
    names = list(dice.drawn)
    tame: set[str] = set()
    size = len(names)
    while size:  # in halves first, since most of them do not matter
        for start in range(0, len(names), size):
            more = set(names[start : start + size]) - tame
            if not more:
                continue
            robot = wild_robot(Dice(seed, tame | more))
            if robot is not None and fails(robot):
                tame |= more
        size //= 2
    dice = Dice(seed, tame)
    configuration(dice)
    return dice
