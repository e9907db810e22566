"""One joint on the bench and how a technician moves it: small steps within its pulse limits; rad, us."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import NamedTuple

from hobnail.robot import Joint, Span
from hobnail.servo import JointMap
from hobnail.workshop.calibrate.effects import ALWAYS, Move, Say, Steps, ask, shown
from hobnail.workshop.calibrate.words import Place, how_measured, ways

STEP_DEG = 1.0
LONG_STEP_DEG = 5.0
LONGEST_STEP_DEG = 10.0
STEP_US = 10.0
LONG_STEP_US = 50.0
LONGEST_STEP_US = 100.0


@dataclass
class Work:
    """The joint that is being calibrated, as far as it is known by now; it has the pulse `pulse_us`."""

    place: Place
    joint: Joint
    pulse_us: float
    allowed_us: Span  # of the configuration; what was measured may be narrower

    @property
    def angle_rad(self) -> float:
        """Where the joint should be, by what is known."""
        return JointMap(self.joint).angle_rad(self.pulse_us)

    def pulse_for(self, angle_rad: float) -> float:
        """The pulse for an angle, brought within the limits."""
        low, high = self.joint.pulse_limits_us
        return min(max(JointMap(self.joint).pulse_us(angle_rad), low), high)

    @property
    def shaft_rad(self) -> float:
        """Where the shaft should be, by the pulse map."""
        joint = self.joint
        return joint.direction * (self.angle_rad - joint.zero_rad) + joint.trim_rad

    def move(self, pulse_us: float) -> Steps[None]:
        """Turn there, slowly."""
        yield Move(pulse_us)
        self.pulse_us = pulse_us


class Stood(NamedTuple):
    """The end of jogging; `measured_rad` None: just as it should."""

    measured_rad: float | None


def jog_angle(work: Work, topic: str, *, far_rad: float) -> Steps[Stood]:
    """Let the technician move the joint until it stands as told, or measure where it stands.

    A measure further than `far_rad` from where the joint should be is a slip, most often.
    """
    plus, minus = ways(work.place)
    yield Say(
        f"  + moves the foot {_as_way(plus)}, - {_as_way(minus)}, by {STEP_DEG:g} deg; ++ and -- by "
        f"{LONG_STEP_DEG:g}; +0.2 or -3 by so many\n"
        f"  ok           it stands so\n"
        f"  is DEGREES   it does not, and was measured: {how_measured(work.place)}"
    )
    while True:
        answer = yield from ask(topic, "  move, ok or is", ("+", "-", "ok", "is DEGREES", *ALWAYS))
        if answer == "ok":
            return Stood(None)
        if answer.startswith("is"):
            measured = _measured(answer[2:])
            if measured is None:
                yield Say(
                    f"  {shown(answer)}: after `is` goes a number of degrees, -180 to 180, as in: is 87.5"
                )
                continue
            expected = work.angle_rad
            if abs(measured - expected) > far_rad:
                hint = ". Is its sign right?" if abs(measured + expected) < far_rad else "."
                yield Say(
                    f"  {math.degrees(measured):g} deg is far from {math.degrees(expected):.0f} deg, where "
                    f"it should be{hint} Wanted: {how_measured(work.place)}"
                )
                continue
            return Stood(measured)
        degrees = _step(answer, STEP_DEG, LONG_STEP_DEG)
        if degrees is None or abs(degrees) > LONGEST_STEP_DEG:
            yield Say(
                f"  {shown(answer)} is no answer here; allowed: + - ++ --, +DEGREES or -DEGREES up to "
                f"{LONGEST_STEP_DEG:g}, ok, is DEGREES, {', '.join(ALWAYS)}"
            )
            continue
        pulse = JointMap(work.joint).pulse_us(work.angle_rad + math.radians(degrees))
        yield from _to(work, pulse, work.joint.pulse_limits_us, "pulse limits")


def jog_pulse(work: Work, topic: str) -> Steps[None]:
    """Let the technician move the joint by pulses until it stands where it should."""
    while True:
        answer = yield from ask(topic, f"  at {work.pulse_us:.0f} us", ("+", "-", "ok", *ALWAYS))
        if answer == "ok":
            return
        step = _step(answer, STEP_US, LONG_STEP_US)
        if step is None or abs(step) > LONGEST_STEP_US:
            yield Say(
                f"  {shown(answer)} is no answer here; allowed: + - ({STEP_US:g} us), ++ -- "
                f"({LONG_STEP_US:g} us), +MICROSECONDS or -MICROSECONDS up to {LONGEST_STEP_US:g}, ok, "
                f"{', '.join(ALWAYS)}"
            )
            continue
        yield from _to(work, work.pulse_us + step, work.allowed_us, "limits of the configuration")


def _to(work: Work, pulse_us: float, limits_us: Span, whose: str) -> Steps[None]:
    """Move, as far as the limits go."""
    low, high = limits_us
    within = min(max(pulse_us, low), high)
    if within != pulse_us:
        yield Say(f"  that is as far as the {whose} go: {low:g} to {high:g} us")
    if within != work.pulse_us:
        yield from work.move(within)


def _step(answer: str, short: float, long: float) -> float | None:
    """The signed step that was typed; None when it is none."""
    fixed = {"+": short, "-": -short, "++": long, "--": -long}
    if answer in fixed:
        return fixed[answer]
    found = re.fullmatch(r"([+-])\s*(\d{1,3}(?:\.\d{0,4})?)", answer, re.ASCII)
    return float(found[1] + found[2]) if found else None


def _measured(text: str) -> float | None:
    """A measured angle as typed in degrees, rad; None when it is none."""
    found = re.fullmatch(r"\s*([+-]?\d{1,3}(?:\.\d{0,4})?)\s*(?:deg)?", text, re.ASCII)
    if not found or abs(float(found[1])) > 180.0:
        return None
    return math.radians(float(found[1]))


def _as_way(word: str) -> str:
    return {"bends": "by bending the knee", "straightens": "by straightening the knee"}.get(word, word)
