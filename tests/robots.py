"""Robots for the tests, in SI units: the two demo robots, two made up by hand, and any number at random.

`made_up()` is a hypothesis strategy for whole robots that could stand on a
bench: four to eight legs, knees either way, wiring either way round, pulse maps
of two or more points.  Nothing here checks anything.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache
from itertools import pairwise
from pathlib import Path

from hypothesis import settings
from hypothesis import strategies as st

from hobnail.config import load_robot
from hobnail.motion.gaits import built_in_gait
from hobnail.robot import (
    Board,
    Body,
    Envelope,
    Gait,
    Joint,
    Keyframe,
    Leg,
    PostureLimits,
    Robot,
    Servo,
    Span,
    Stance,
    Supply,
    Vec2,
    Vec3,
)

CONFIG = Path(__file__).parents[1] / "config"


def examples(count: int) -> settings:
    """Hypothesis settings for `count` examples in the short profile, and in proportion in others."""
    return settings(max_examples=max(1, count * settings().max_examples // 100))


@cache
def juniper() -> Robot:
    """The demo robot with four legs."""
    return load_robot(CONFIG / "juniper.yaml")


@cache
def bramble() -> Robot:
    """The demo robot with six legs."""
    return load_robot(CONFIG / "bramble.yaml")


def make_joint(
    name: str,
    servo: Servo,
    channel: int,
    *,
    middle_rad: float,
    travel_rad: float,
    direction: int = 1,
    trim_rad: float = 0.0,
    pulse_map: tuple[Vec2, ...] = ((-math.pi / 2, 500.0), (math.pi / 2, 2500.0)),
    pulse_limits_us: Span = (520.0, 2480.0),
) -> Joint:
    """A joint whose servo is at its middle at `middle_rad`, with angle limits `travel_rad` either way."""
    return Joint(
        name=name,
        servo=servo,
        board=f"board{channel // 16}",
        channel=channel % 16,
        direction=direction,
        zero_rad=middle_rad,
        trim_rad=trim_rad,
        pulse_map=pulse_map,
        pulse_limits_us=pulse_limits_us,
        angle_limits_rad=(middle_rad - travel_rad, middle_rad + travel_rad),
    )


def make_boards(joints: int) -> tuple[Board, ...]:
    """As many boards of 16 channels as that takes."""
    return tuple(
        Board(name=f"board{number}", bus=1, address=0x40 + number, frame_hz=100.0)
        for number in range((joints + 15) // 16)
    )


def _fixed(
    name: str,
    *,
    hips_m: Vec2,
    links_m: Vec3,
    knee: int,
    trunk_kg: float,
    leg_kg: Vec3,
    com_m: Vec3,
    foot_radius_m: float,
    servo: Servo,
    height_m: float,
    envelope: Envelope,
) -> Robot:
    abduction, upper, lower = links_m
    legs = []
    for index, leg_name in enumerate(("left-front", "right-front", "left-hind", "right-hind")):
        side = 1.0 if index % 2 == 0 else -1.0
        bend = knee * math.acos(min(height_m / (upper + lower), 1.0))
        joints = [
            make_joint(
                f"{leg_name}.{part}",
                servo,
                3 * index + number,
                middle_rad=middle,
                travel_rad=1.3,
                direction=1 if (index + number) % 2 == 0 else -1,
            )
            for number, (part, middle) in enumerate((("roll", 0.0), ("hip", -bend), ("knee", 2.0 * bend)))
        ]
        legs.append(
            Leg(
                name=leg_name,
                hip_m=(hips_m[0] if index < 2 else -hips_m[0], side * hips_m[1], 0.0),
                abduction_m=side * abduction,
                upper_m=upper,
                lower_m=lower,
                knee=knee,
                joints=(joints[0], joints[1], joints[2]),
                foot_radius_m=foot_radius_m,
                hip_kg=leg_kg[0],
                upper_kg=leg_kg[1],
                lower_kg=leg_kg[2],
            )
        )
    hips = [leg.hip_m for leg in legs]
    gaits = []
    for gait_name, cycle_range_s in (("trot", (0.4, 1.5)), ("crawl", (1.2, 4.0)), ("amble", (0.5, 2.0))):
        pattern = built_in_gait(gait_name, hips)
        gaits.append(
            Gait(
                name=gait_name,
                duty=pattern.duty,
                phases=pattern.phases,
                body_shift=pattern.body_shift,
                cycle_range_s=cycle_range_s,
                lift_m=0.12 * height_m,
            )
        )
    return Robot(
        name=name,
        period_s=0.01,
        body=Body(mass_kg=trunk_kg, com_m=com_m, size_m=(2.2 * hips_m[0], 2.0 * hips_m[1], 0.05)),
        legs=tuple(legs),
        boards=make_boards(12),
        gaits=tuple(gaits),
        stance=Stance(height_m=height_m, rest_height_m=0.5 * height_m),
        envelope=envelope,
        posture_limits=PostureLimits(
            height_m=(0.8 * height_m, 1.06 * height_m), roll_rad=0.1, pitch_rad=0.1, yaw_rad=0.15, lean_m=0.02
        ),
        supply=Supply(nominal_v=6.0),
    )


@cache
def stilt() -> Robot:
    """Long-legged and light: thin legs, knees ahead, quick servos of unknown stiffness, pointed feet."""
    return _fixed(
        "stilt",
        hips_m=(0.11, 0.04),
        links_m=(0.03, 0.15, 0.17),
        knee=1,
        trunk_kg=0.8,
        leg_kg=(0.08, 0.05, 0.02),
        com_m=(0.01, 0.0, 0.02),
        foot_radius_m=0.0,
        servo=Servo(name="quick", speed_rad_s=10.0, torque_nm=1.5, rated_v=6.0),
        height_m=0.25,
        envelope=Envelope(forward_m_s=0.3, sideways_m_s=0.15, turn_rad_s=0.9),
    )


@cache
def anvil() -> Robot:
    """Heavy and low: short wide legs, knees behind, slow strong servos that give, big round feet."""
    return _fixed(
        "anvil",
        hips_m=(0.10, 0.08),
        links_m=(0.06, 0.07, 0.08),
        knee=-1,
        trunk_kg=4.0,
        leg_kg=(0.2, 0.12, 0.06),
        com_m=(-0.015, 0.004, -0.01),
        foot_radius_m=0.015,
        servo=Servo(name="strong", speed_rad_s=6.0, torque_nm=4.0, rated_v=7.4, stiffness_nm_rad=25.0),
        height_m=0.12,
        envelope=Envelope(forward_m_s=0.12, sideways_m_s=0.08, turn_rad_s=0.5),
    )


def fixed_robots() -> tuple[Robot, ...]:
    """The four robots that are always the same."""
    return juniper(), bramble(), stilt(), anvil()


# ---- at random


def _floats(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False, allow_infinity=False, width=64)


@st.composite
def pulse_maps(draw: st.DrawFn) -> tuple[Vec2, ...]:
    """Pulse maps of two to six points, rising or falling, over some 180 to 270 degrees."""
    count = draw(st.integers(2, 6))
    half = draw(_floats(1.5, 2.4))
    shares = [draw(_floats(0.7, 1.4)) for _ in range(count - 1)]
    steps = [draw(_floats(0.8, 1.25)) for _ in range(count - 1)]
    shafts, pulses = [-half], [500.0]
    for share, step in zip(shares, steps, strict=True):
        shafts.append(shafts[-1] + 2.0 * half * share / sum(shares))
        pulses.append(
            pulses[-1] + 2000.0 * share * step / sum(a * b for a, b in zip(shares, steps, strict=True))
        )
    if draw(st.booleans()):
        pulses = pulses[::-1]
    return tuple(zip(shafts, pulses, strict=True))


@st.composite
def servos(draw: st.DrawFn) -> Servo:
    """Hobby servos from slow to quick, of known stiffness or not."""
    return Servo(
        name="any",
        speed_rad_s=draw(_floats(4.0, 12.0)),
        torque_nm=draw(_floats(0.8, 4.0)),
        rated_v=draw(st.sampled_from((5.0, 6.0, 7.4))),
        usable_speed=draw(_floats(0.6, 0.9)),
        stiffness_nm_rad=draw(st.none() | _floats(10.0, 30.0)),
    )


@st.composite
def joints(draw: st.DrawFn) -> Joint:
    """Single joints, calibrated in any way."""
    return make_joint(
        "a.joint",
        draw(servos()),
        draw(st.integers(0, 15)),
        middle_rad=draw(_floats(-2.0, 2.0)),
        travel_rad=draw(_floats(0.5, 3.0)),
        direction=draw(st.sampled_from((1, -1))),
        trim_rad=draw(_floats(-0.3, 0.3)),
        pulse_map=draw(pulse_maps()),
    )


@st.composite
def legs(draw: st.DrawFn) -> Leg:
    """Single legs of any proportions; joints wide open."""
    servo = Servo(name="any", speed_rad_s=8.0, torque_nm=2.0, rated_v=6.0)
    wide = [
        make_joint(f"leg.{index}", servo, index, middle_rad=0.0, travel_rad=math.pi) for index in range(3)
    ]
    return Leg(
        name="leg",
        hip_m=(draw(_floats(-0.2, 0.2)), draw(_floats(-0.1, 0.1)), draw(_floats(-0.02, 0.02))),
        abduction_m=draw(st.sampled_from((1.0, -1.0))) * draw(_floats(0.0, 0.08)),
        upper_m=draw(_floats(0.03, 0.3)),
        lower_m=draw(_floats(0.03, 0.3)),
        knee=draw(st.sampled_from((1, -1))),
        joints=(wide[0], wide[1], wide[2]),
        foot_radius_m=draw(_floats(0.0, 0.02)),
    )


@st.composite
def swings(draw: st.DrawFn) -> tuple[Keyframe, ...]:
    """Swings of three to six keyframes: up and down once, with all sorts of travel."""
    count = draw(st.integers(3, 6))
    gaps = [draw(_floats(0.5, 1.5)) for _ in range(count - 1)]
    times = [sum(gaps[:index]) / sum(gaps) for index in range(count)]
    inner = range(1, count - 1)
    travel = [0.0, *sorted(draw(_floats(0.0, 1.0)) for _ in inner), 1.0]
    lift = [0.0, *(draw(_floats(0.3, 1.0)) for _ in inner), 0.0]
    times[-1] = 1.0
    return tuple(
        Keyframe(time=time, travel=way, lift=up) for time, way, up in zip(times, travel, lift, strict=True)
    )


def even_gait(count: int, left: Sequence[bool], *, down: int) -> tuple[float, tuple[float, ...]]:
    """Duty factor and phases of a gait for any number of legs, given from hind to fore on
    each side, that has at least `down` feet on the ground: touch-downs evenly spread."""
    rows = {True: 0, False: 0}
    order = sorted(range(count), key=lambda index: (not left[index], index))
    phases = [0.0] * count
    for place, index in enumerate(order):
        phases[index] = place / count
        rows[left[index]] += 1
    # `count - down` feet may be up at once, each for a little less than that many spacings.
    return 1.0 - 0.85 * (count - down) / count, tuple(phases)


@st.composite
def made_up(draw: st.DrawFn, *, legs_from: int = 4, legs_to: int = 8, round_feet: bool = True) -> Robot:
    """Whole robots at random, sane enough to walk."""
    count = draw(st.integers(legs_from, legs_to))
    servo = draw(servos())
    upper = draw(_floats(0.05, 0.16))
    lower = upper * draw(_floats(0.85, 1.4))
    abduction = draw(_floats(0.0, 0.06))
    knee = draw(st.sampled_from((1, -1)))
    height = (upper + lower) * draw(_floats(0.62, 0.82))
    foot_radius = draw(_floats(0.0, 0.015)) if round_feet else 0.0
    half_width = draw(_floats(0.03, 0.1))
    spacing = draw(_floats(0.9, 1.6)) * (upper + lower)
    on_left = (count + 1) // 2
    sides = [True] * on_left + [False] * (count - on_left)
    kg = [draw(_floats(0.02, 0.2)) for _ in range(3)]
    # The angles of the neutral stance, nearly: servos are mounted about them.
    reach = (height - foot_radius) / (upper + lower)
    bend = knee * math.acos(reach)
    made = []
    maps = [draw(pulse_maps()) for _ in range(2)]
    for index, is_left in enumerate(sides):
        row, rows = (index, on_left) if is_left else (index - on_left, count - on_left)
        side = 1.0 if is_left else -1.0
        parts = [
            make_joint(
                f"leg{index}.{part}",
                servo,
                3 * index + number,
                middle_rad=middle,
                travel_rad=1.25,
                direction=draw(st.sampled_from((1, -1))),
                trim_rad=draw(_floats(-0.1, 0.1)),
                pulse_map=draw(st.sampled_from(maps)),
            )
            for number, (part, middle) in enumerate((("roll", 0.0), ("hip", -bend), ("knee", 2.0 * bend)))
        ]
        made.append(
            Leg(
                name=f"leg{index}",
                hip_m=(spacing * (row - 0.5 * (rows - 1)), side * half_width, 0.0),
                abduction_m=side * abduction,
                upper_m=upper,
                lower_m=lower,
                knee=knee,
                joints=(parts[0], parts[1], parts[2]),
                foot_radius_m=foot_radius,
                hip_kg=kg[0],
                upper_kg=kg[1],
                lower_kg=kg[2],
            )
        )
    duty, phases = even_gait(count, sides, down=3)
    slow_duty, slow_phases = even_gait(count, sides, down=count - 1)
    lift = draw(_floats(0.06, 0.15)) * height
    gaits = (
        Gait(name="quick", duty=duty, phases=phases, cycle_range_s=(0.6, 3.0), lift_m=lift),
        Gait(
            name="slow",
            duty=slow_duty,
            phases=slow_phases,
            cycle_range_s=(1.2, 6.0),
            lift_m=lift,
            body_shift=draw(_floats(0.0, 1.0)),
            swing=draw(swings()),
        ),
        Gait(name="timed", duty=duty, phases=phases, cycle_s=draw(_floats(0.8, 2.0)), lift_m=lift),
    )
    speed = draw(_floats(0.3, 1.0)) * height
    return Robot(
        name="made-up",
        period_s=draw(st.sampled_from((0.01, 0.02))),
        body=Body(
            mass_kg=draw(_floats(0.5, 4.0)),
            com_m=(draw(_floats(-0.02, 0.02)), draw(_floats(-0.01, 0.01)), draw(_floats(-0.03, 0.03))),
        ),
        legs=tuple(made),
        boards=make_boards(3 * count),
        gaits=gaits,
        stance=Stance(
            height_m=height,
            rest_height_m=0.75 * height,
            spread_m=draw(_floats(0.0, 0.015)),
            forward_m=draw(_floats(-0.01, 0.01)),
        ),
        envelope=Envelope(
            forward_m_s=speed,
            sideways_m_s=0.5 * speed,
            turn_rad_s=draw(_floats(0.3, 1.0)),
            acceleration_m_s2=draw(_floats(0.2, 1.0)),
            turn_acceleration_rad_s2=draw(_floats(1.0, 4.0)),
        ),
        posture_limits=PostureLimits(
            height_m=(0.9 * height, 1.04 * height), roll_rad=0.06, pitch_rad=0.06, yaw_rad=0.08, lean_m=0.01
        ),
        supply=Supply(nominal_v=servo.rated_v * draw(_floats(0.9, 1.1))),
    )


def gaps(values: Sequence[float]) -> list[float]:
    """Differences between neighbours."""
    return [after - before for before, after in pairwise(values)]
