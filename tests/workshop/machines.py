"""Robots made up for the rehearsal's tests, in SI units; none of them is shipped.

`thistle` is tall: long thin legs, small feet, quick servos, a narrow trunk.
`burdock` is squat: short legs, knees the other way, a wide heavy trunk, big feet.
`sedge` is springy: soft servos, knees that point at each other, the built-in trot as it is.
"""

from __future__ import annotations

import math
from dataclasses import replace

from hobnail.motion.gaits import LIFT_SHARE, built_in_gait
from hobnail.robot import (
    Board,
    Body,
    Envelope,
    Gait,
    Joint,
    Leg,
    PostureLimits,
    Robot,
    Servo,
    Stance,
    Supply,
)

KGF_CM = 0.0980665  # N m
LEG_NAMES = ("left-front", "right-front", "left-hind", "right-hind")
# Leg order as above; in a trot diagonal pairs touch down together.
DIAGONAL = (0.0, 0.5, 0.5, 0.0)
CRAWL = Gait(
    name="crawl",
    duty=0.8,
    phases=(0.25, 0.75, 0.0, 0.5),
    cycle_range_s=(1.2, 4.0),
    lift_m=0.02,
    body_shift=1.0,
)


def four_legs(
    name: str,
    *,
    hips_m: tuple[float, float],
    links_m: tuple[float, float, float],
    knee: int,
    trunk_kg: float,
    leg_kg: tuple[float, float, float],
    com_m: tuple[float, float, float],
    foot_radius_m: float,
    servo: Servo,
    height_m: float,
    rest_height_m: float,
    spread_m: float,
    envelope: Envelope,
    supply_v: float,
    belly_m: float,
    trot: Gait,
    forward_m: float = 0.0,
    period_s: float = 0.01,
) -> Robot:
    """A robot with four legs on one board; `hips_m` is (length, width) between hips."""
    d, upper, lower = links_m
    # Servos are mounted so that their middle is near the joint angle of the neutral stance.
    bend = knee * math.radians(45.0)
    legs = []
    for index, leg_name in enumerate(LEG_NAMES):
        front, left = index < 2, index % 2 == 0
        side = 1.0 if left else -1.0
        joints = []
        for number, (part, zero) in enumerate((("roll", 0.0), ("hip", -bend), ("knee", 2 * bend))):
            # Mirrored mounting, as on any real robot: the right side turns the other way.
            direction = -1 if (part != "roll" and not left) or (part == "roll" and not front) else 1
            joints.append(
                Joint(
                    name=f"{leg_name}.{part}",
                    servo=servo,
                    board="main",
                    channel=3 * index + number,
                    direction=direction,
                    zero_rad=zero,
                    pulse_map=((-math.pi / 2, 500.0), (math.pi / 2, 2500.0)),
                    pulse_limits_us=(550.0, 2450.0),
                    angle_limits_rad=(zero - 1.45, zero + 1.45),
                )
            )
        legs.append(
            Leg(
                name=leg_name,
                hip_m=((0.5 if front else -0.5) * hips_m[0], side * hips_m[1] / 2, 0.0),
                abduction_m=side * d,
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
    return Robot(
        name=name,
        period_s=period_s,
        body=Body(
            mass_kg=trunk_kg,
            com_m=com_m,
            size_m=(hips_m[0] + 0.04, hips_m[1], 0.06),
            belly_m=belly_m,
        ),
        legs=tuple(legs),
        boards=(Board(name="main", bus=1, address=0x40, frame_hz=200.0),),
        gaits=(trot, CRAWL),
        stance=Stance(height_m=height_m, rest_height_m=rest_height_m, spread_m=spread_m, forward_m=forward_m),
        envelope=envelope,
        posture_limits=PostureLimits(height_m=(height_m - 0.03, height_m + 0.02)),
        supply=Supply(nominal_v=supply_v),
    )


def built_in_trot(height_m: float) -> Gait:
    """As the configuration of a robot that stands so high has it when it names it only."""
    corners = [(x, y, 0.0) for x in (0.1, -0.1) for y in (0.1, -0.1)]
    pattern = built_in_gait("trot", corners)
    return Gait(
        name="trot",
        duty=pattern.duty,
        phases=pattern.phases,
        cycle_range_s=pattern.cycle_range_s(height_m),
        lift_m=LIFT_SHARE * height_m,
        body_shift=pattern.body_shift,
    )


def sedge() -> Robot:
    """Springy: it rocks where its cycle suits that."""
    servo = Servo(
        name="soft",
        speed_rad_s=math.radians(60.0) / 0.12,
        torque_nm=20 * KGF_CM,
        rated_v=6.0,
        stiffness_nm_rad=14.0,
        dead_band_us=3.0,
    )
    hind, front = (
        four_legs(
            "sedge",
            hips_m=(0.22, 0.11),
            links_m=(0.04, 0.105, 0.11),
            knee=knee,
            trunk_kg=1.5,
            leg_kg=(0.12, 0.09, 0.04),
            com_m=(-0.01, 0.0, 0.0),
            foot_radius_m=0.010,
            servo=servo,
            height_m=0.16,
            rest_height_m=0.05,
            belly_m=0.045,
            spread_m=0.01,
            envelope=Envelope(forward_m_s=0.2, sideways_m_s=0.1, turn_rad_s=0.8),
            supply_v=6.0,
            trot=built_in_trot(0.16),
        )
        for knee in (-1, 1)
    )
    return replace(hind, legs=(*front.legs[:2], *hind.legs[2:]))


def thistle() -> Robot:
    """Tall, narrow, quick."""
    servo = Servo(
        name="quick",
        speed_rad_s=math.radians(60.0) / 0.10,
        torque_nm=25 * KGF_CM,
        rated_v=7.4,
        stiffness_nm_rad=25.0,
        dead_band_us=3.0,
    )
    return four_legs(
        "thistle",
        hips_m=(0.26, 0.09),
        links_m=(0.04, 0.14, 0.15),
        knee=1,
        trunk_kg=1.9,
        leg_kg=(0.14, 0.10, 0.05),
        com_m=(0.012, -0.004, 0.01),
        foot_radius_m=0.008,
        servo=servo,
        height_m=0.21,
        rest_height_m=0.052,
        belly_m=0.05,
        # Rehearsed: with more duty or longer cycles it rocks.
        trot=Gait(
            name="trot", duty=0.5, phases=DIAGONAL, cycle_range_s=(0.38, 0.4), lift_m=0.015, body_shift=1.0
        ),
        spread_m=0.01,
        envelope=Envelope(forward_m_s=0.25, sideways_m_s=0.12, turn_rad_s=0.8),
        supply_v=7.4,
    )


def burdock() -> Robot:
    """Squat, wide, heavy for its size, knees backwards."""
    servo = Servo(
        name="stout",
        speed_rad_s=math.radians(60.0) / 0.14,
        torque_nm=18 * KGF_CM,
        rated_v=6.0,
        stiffness_nm_rad=16.0,
        dead_band_us=5.0,
    )
    return four_legs(
        "burdock",
        hips_m=(0.18, 0.14),
        links_m=(0.05, 0.08, 0.09),
        knee=-1,
        trunk_kg=1.4,
        leg_kg=(0.12, 0.06, 0.03),
        com_m=(-0.008, 0.003, 0.0),
        foot_radius_m=0.014,
        servo=servo,
        height_m=0.125,
        rest_height_m=0.042,
        belly_m=0.04,
        # Rehearsed: a low robot tips quickly and has to step quickly, so it lifts little.
        trot=Gait(
            name="trot", duty=0.52, phases=DIAGONAL, cycle_range_s=(0.34, 0.38), lift_m=0.012, body_shift=1.0
        ),
        spread_m=0.005,
        envelope=Envelope(forward_m_s=0.12, sideways_m_s=0.06, turn_rad_s=0.5),
        supply_v=6.0,
    )
