"""The four measurements at one joint, each by itself: direction, trim, pulse map, hard limits; rad, us.

Generators of effects (`effects`).  Each begins and ends with the joint awake,
and keeps what was accepted at once.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise
from typing import Any

from hobnail.robot import Vec2
from hobnail.servo import JointMap
from hobnail.workshop.calibrate.effects import Keep, Say, Skip, Steps, agree, choose
from hobnail.workshop.calibrate.jog import Work, jog_angle, jog_pulse
from hobnail.workshop.calibrate.seat import TEETH, advice, better_seat
from hobnail.workshop.calibrate.words import HIP, KNEE, Posture, reference, spread, ways

NUDGE_RAD = math.radians(8.0)
GREATEST_TRIM_RAD = math.radians(45.0)
FAR_TRIM_RAD = math.radians(60.0)
FAR_MAP_RAD = math.radians(30.0)
MAP_POINTS = 3
LEAST_SPREAD_RAD = math.radians(30.0)
PULSE_RATE = (1.0, 100.0)  # us a degree that a calibration may hold
MARGIN_US = 20.0
LEAST_TRAVEL_US = 200.0


def direction(work: Work) -> Steps[None]:
    """Which way the joint turns for a longer pulse: move a little, ask, keep."""
    plus, minus = ways(work.place)
    start_us, start_rad = work.pulse_us, work.angle_rad
    low, high = work.joint.pulse_limits_us
    size_rad = max(
        (sign * NUDGE_RAD for sign in (1.0, -1.0)),
        key=lambda nudge: (low <= JointMap(work.joint).pulse_us(start_rad + nudge) <= high, nudge),
    )
    expected = plus if size_rad > 0.0 else minus
    yield Say(f"Direction. The joint moves by {math.degrees(NUDGE_RAD):g} deg and back; watch the leg.")
    while True:
        yield from work.move(work.pulse_for(start_rad + size_rad))
        seen = yield from choose("direction", _question(work), (plus, minus, "again", "nothing", "other"))
        yield from work.move(start_us)
        if seen != "again":
            break
    if seen in ("nothing", "other"):
        wire = f"board {work.joint.board}, channel {work.joint.channel}"
        yield Say(
            f"  Is {work.joint.name} plugged into {wire}, and the servo supply on?"
            if seen == "nothing"
            else f"  {wire} is not wired to {work.joint.name}: correct the plug, or the configuration."
        )
        return
    right = work.joint.direction if seen == expected else -work.joint.direction
    yield from _keep(work, direction=right)
    yield Say(f"  kept: direction {right}" + ("" if seen == expected else ", which was the other way"))


def trim(work: Work, teeth: int = TEETH) -> Steps[None]:
    """How the horn sits: at a posture that can be judged, jog or measure, keep the difference."""
    posture = reference(work.place, work.joint)
    way_deg = abs(math.degrees(posture.angle_rad - work.angle_rad))
    yield Say(
        f"Trim. The joint moves slowly by {way_deg:.0f} deg, to "
        f"{math.degrees(posture.angle_rad):g} deg. There, the body being level, it should be so:\n"
        f"  {posture.words}"
    )
    if not (yield from agree("trim-move", "  Move it there?")):
        return
    yield from work.move(work.pulse_for(posture.angle_rad))
    while True:
        stood = yield from jog_angle(work, "trim", far_rad=FAR_TRIM_RAD)
        angle = posture.angle_rad if stood.measured_rad is None else stood.measured_rad
        joint = work.joint
        measured = work.shaft_rad - joint.direction * (angle - joint.zero_rad)
        yield Say(f"  trim {_degrees(measured)} deg; it was {_degrees(joint.trim_rad)}")
        seat = better_seat(measured, joint.direction, teeth)
        if seat is not None:
            yield Say(f"  {advice(seat, ways(work.place), teeth)}")
        if abs(measured) > GREATEST_TRIM_RAD:
            yield Say("  A trim may be 45 deg at most. Seat the horn better, then measure this joint again.")
            return
        answer = yield from choose("trim-keep", "  Keep it?", ("yes", "no", "again"))
        if answer == "yes":
            yield from _keep(work, trim_rad=measured)
            yield Say("  kept")
        if answer != "again":
            return


def pulse_map(work: Work, count: int = MAP_POINTS) -> Steps[None]:
    """What pulse gives what angle: postures over the range, each jogged to or measured."""
    yield Say(
        f"Pulse map. The joint moves slowly to {count} postures over its range. At each, measure its angle, "
        "or jog until it stands as told. Two are enough; `skip` ends early."
    )
    if not (yield from agree("map-move", "  Begin?")):
        return
    points: list[Vec2] = []
    for number, posture in enumerate(spread(work.place, work.joint, count), start=1):
        yield Say(f"  {number} of {count}: {math.degrees(posture.angle_rad):g} deg: {posture.words}")
        try:
            points.append((yield from _point(work, posture)))
        except Skip:
            if len(points) < 2:
                raise
            break
    points.sort()
    problem = map_problem(points)
    if problem:
        yield Say(f"  These points make no map: {problem}. Nothing is kept; measure them again.")
        return
    told = ", ".join(
        f"{math.degrees(shaft):.1f} deg {pulse:.0f} us ({pulse - _mapped(work, shaft):+.0f})"
        for shaft, pulse in points
    )
    yield Say(f"  of the shaft, and the difference from the present map: {told}")
    if (yield from agree("map-keep", "  Keep this map?")):
        yield from _keep(work, pulse_map=tuple(points))
        yield Say("  kept")


def limits(work: Work, margin_us: float = MARGIN_US) -> Steps[None]:
    """The pulses never to be left: jog towards each end, stop before the servo buzzes, keep a margin."""
    low, high = work.allowed_us
    yield Say(
        f"Hard limits. Jog towards each end, {low:g} to {high:g} us by the configuration, in small steps; "
        "stop before the servo buzzes or a link touches anything. "
        f"What is kept stays {margin_us:g} us clear of where you stop."
    )
    if not (yield from agree("limits-move", "  Begin?")):
        return
    ends = []
    start_us = work.pulse_us
    for topic, toward, sign in (
        ("limit-low", "- makes it shorter", 1.0),
        ("limit-high", "+ makes it longer", -1.0),
    ):
        yield Say(f"  The {'shortest' if sign > 0 else 'longest'} pulse: {toward}; ok where it must stop.")
        yield from jog_pulse(work, topic)
        at_end = work.pulse_us == work.allowed_us[0 if sign > 0 else 1]
        ends.append(work.pulse_us if at_end else work.pulse_us + sign * margin_us)
        yield from work.move(start_us)
    if ends[1] - ends[0] < LEAST_TRAVEL_US:
        yield Say(
            f"  {ends[0]:.0f} to {ends[1]:.0f} us leaves less than {LEAST_TRAVEL_US:g} us of travel: nothing "
            "is kept; measure again, the shortest pulse first."
        )
        return
    if (yield from agree("limits-keep", f"  Keep {ends[0]:.0f} to {ends[1]:.0f} us?")):
        yield from _keep(work, pulse_limits_us=(ends[0], ends[1]))
        yield Say("  kept")
    within = min(max(work.pulse_us, work.joint.pulse_limits_us[0]), work.joint.pulse_limits_us[1])
    if within != work.pulse_us:
        yield from work.move(within)


STEPS: dict[str, Callable[..., Steps[None]]] = {
    "direction": direction,
    "trim": trim,
    "map": pulse_map,
    "limits": limits,
}


def map_problem(points: list[Vec2]) -> str:
    """Why points, sorted by shaft angle, make no pulse map; empty when they do."""
    if points[-1][0] - points[0][0] < LEAST_SPREAD_RAD:
        return (
            f"they are within {math.degrees(points[-1][0] - points[0][0]):.0f} deg, and should be "
            f"{math.degrees(LEAST_SPREAD_RAD):.0f} deg apart or more"
        )
    for (shaft0, pulse0), (shaft1, pulse1) in pairwise(points):
        degrees = math.degrees(shaft1 - shaft0)
        if degrees < 1.0 or not PULSE_RATE[0] <= (pulse1 - pulse0) / degrees <= PULSE_RATE[1]:
            return (
                f"from {pulse0:.0f} to {pulse1:.0f} us the shaft turned by {degrees:.1f} deg; allowed are "
                f"{PULSE_RATE[0]:g} to {PULSE_RATE[1]:g} us a degree, rising. Is the direction right?"
            )
    return ""


def _point(work: Work, posture: Posture) -> Steps[Vec2]:
    yield from work.move(work.pulse_for(posture.angle_rad))
    stood = yield from jog_angle(work, "map", far_rad=FAR_MAP_RAD)
    angle = posture.angle_rad if stood.measured_rad is None else stood.measured_rad
    joint = work.joint
    return joint.direction * (angle - joint.zero_rad) + joint.trim_rad, work.pulse_us


def _mapped(work: Work, shaft_rad: float) -> float:
    joint = work.joint
    return JointMap(joint).pulse_us((shaft_rad - joint.trim_rad) * joint.direction + joint.zero_rad)


def _keep(work: Work, **values: Any) -> Steps[None]:
    yield Keep(work.joint.name, values)
    work.joint = replace(work.joint, **values)


def _question(work: Work) -> str:
    if work.place.number == KNEE:
        return "  What did the knee do?"
    return f"  Which way did the {'foot' if work.place.number == HIP else 'leg'} go?"


def _degrees(angle_rad: float) -> str:
    return f"{math.degrees(angle_rad):+.2f}"
