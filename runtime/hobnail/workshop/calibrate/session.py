"""The bench session: joints in order, each woken alone, measured step by step, and put to sleep; rad, us.

A generator of effects (`effects`): `play` gives them to a bench, a dialogue and
a record.  Skipping leaves out a step, quitting ends the session; what was
accepted before is kept either way.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Protocol

from hobnail.robot import Robot
from hobnail.servo import JointMap
from hobnail.workshop.calibrate.effects import (
    Ask,
    Keep,
    Move,
    Quit,
    Say,
    Skip,
    Sleep,
    Steps,
    Wake,
    choose,
)
from hobnail.workshop.calibrate.jog import Work
from hobnail.workshop.calibrate.seat import TEETH
from hobnail.workshop.calibrate.steps import MAP_POINTS, MARGIN_US, direction, limits, pulse_map, trim
from hobnail.workshop.calibrate.words import Place

STEP_NAMES = ("direction", "trim", "map", "limits")

CAUTION = (
    "The robot must be on a stand, its feet clear of everything and its body level; hands, hair and leads "
    "out of the legs. Have a switch in the servo supply within reach: this program is no substitute for it.\n"
    "One joint at a time gets pulses. Its first one cannot be made gentle, for a servo does not tell where "
    "it stands: fold each leg to about its rest posture by hand before, and the jump is small; a joint whose "
    "direction was never measured may go the other way. After that it moves slowly, when you say so. Ctrl-C "
    "ends the pulses at once.\n"
    "Answers: a few first letters will do; skip leaves out a step, quit ends; what was kept stays kept."
)


def session(
    robot: Robot,
    configured: Robot,
    joints: Sequence[str],
    start_rad: Mapping[str, float],
    *,
    steps: Sequence[str] = STEP_NAMES,
    started_at: str = "the rest posture",
    notes: Mapping[str, str] | None = None,
    teeth: int = TEETH,
    margin_us: float = MARGIN_US,
    map_points: int = MAP_POINTS,
) -> Steps[None]:
    """Calibrate those joints.

    `robot` is as calibrated by now, `configured` as its file has it.  `start_rad`
    is where each joint gets its first pulse, `started_at` what that is in
    words, `notes` what to tell before each joint.
    """
    places = {leg.joints[number].name: Place(leg, number) for leg in robot.legs for number in range(3)}
    widest = {joint.name: joint.pulse_limits_us for joint in configured.joints}
    yield Say(CAUTION)
    try:
        count = f"{len(joints)} joint{'' if len(joints) == 1 else 's'}"
        ready = yield from choose("ready", f"{count} to calibrate. Ready?", ("yes", "no"))
        if ready == "no":
            return
        for number, name in enumerate(joints, start=1):
            place = places[name]
            yield Say(f"\n{name}, {number} of {len(joints)}{(notes or {}).get(name, '')}")
            try:
                yield from _joint(
                    place,
                    widest[name],
                    start_rad[name],
                    started_at,
                    {
                        "direction": direction,
                        "trim": lambda work: trim(work, teeth),
                        "map": lambda work: pulse_map(work, map_points),
                        "limits": lambda work: limits(work, margin_us),
                    },
                    steps,
                )
            except Skip:
                yield Say("  left out")
    except (Quit, Skip):
        yield Say("Ended.")


def _joint(
    place: Place,
    widest_us: tuple[float, float],
    start_rad: float,
    started_at: str,
    actions: Mapping[str, Any],
    steps: Sequence[str],
) -> Steps[None]:
    joint = place.joint
    low, high = joint.pulse_limits_us
    allowed = (min(low, widest_us[0]), max(high, widest_us[1]))
    work = Work(place, joint, min(max(JointMap(joint).pulse_us(start_rad), low), high), allowed)
    start_us = work.pulse_us
    wake = yield from choose(
        "wake",
        f"  Board {joint.board}, channel {joint.channel}: may it get its first pulse, {start_us:.0f} us, "
        f"{started_at}? It may jump there at full speed.",
        ("yes", "no"),
    )
    if wake == "no":
        raise Skip
    yield Wake(joint.name, start_us)
    for name in steps:
        try:
            yield from actions[name](work)
        except Skip:
            yield Say(f"  {name} left out")
    low, high = work.joint.pulse_limits_us
    yield from work.move(min(max(start_us, low), high))
    yield Sleep()


class Bench(Protocol):
    """One joint at a time, moved slowly."""

    def wake(self, joint: str, pulse_us: float) -> None:
        """Give the joint, and no other, a pulse."""

    def move(self, pulse_us: float) -> None:
        """Turn it there, slowly."""

    def sleep(self) -> None:
        """End the pulses."""


class Dialogue(Protocol):
    """The technician."""

    def say(self, text: str) -> None:
        """Tell."""

    def ask(self, question: Ask) -> str:
        """The line that was answered."""


class Record(Protocol):
    """Where measured values are kept."""

    def keep(self, name: str, values: Mapping[str, Any]) -> None:
        """Write them down; on the disk when this returns."""


def play(steps: Steps[None], bench: Bench, dialogue: Dialogue, record: Record) -> None:
    """Run a session to its end; raises what bench, dialogue and record raise.

    Leaving the bench ends the pulses; that is for whoever opened it.
    """
    try:
        effect = next(steps)
        while True:
            answer = ""
            match effect:
                case Say(text):
                    dialogue.say(text)
                case Ask():
                    answer = dialogue.ask(effect)
                case Wake(joint, pulse_us):
                    bench.wake(joint, pulse_us)
                case Move(pulse_us):
                    bench.move(pulse_us)
                case Sleep():
                    bench.sleep()
                case Keep(name, values):
                    record.keep(name, values)
            effect = steps.send(answer)
    except StopIteration:
        return
