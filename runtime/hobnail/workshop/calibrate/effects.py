"""What a calibration session asks of the world around it; pulses in us.

A session is a generator: it yields one of these and is sent what was answered,
a line of text for `Ask`, nothing for the others.  Nothing here has a terminal,
a driver or a file.
"""

from __future__ import annotations

from collections.abc import Generator, Mapping
from typing import Any, NamedTuple, TypeVar


class Say(NamedTuple):
    """Tell the technician something."""

    text: str


class Ask(NamedTuple):
    """Ask for a line; `topic` is the question's name for programs that answer."""

    topic: str
    question: str
    choices: tuple[str, ...] = ()


class Wake(NamedTuple):
    """Give one joint its first pulse; no other joint has any."""

    joint: str
    pulse_us: float


class Move(NamedTuple):
    """Turn the joint that is awake, slowly."""

    pulse_us: float


class Sleep(NamedTuple):
    """End the pulses."""


class Keep(NamedTuple):
    """Write measured values of a part down at once; attributes as in the calibration, SI units."""

    name: str
    values: Mapping[str, Any]


Effect = Say | Ask | Wake | Move | Sleep | Keep
T = TypeVar("T")
Steps = Generator[Effect, str, T]


class Quit(Exception):  # noqa: N818  nothing is wrong
    """The technician wants to end the session."""


class Skip(Exception):  # noqa: N818  nothing is wrong
    """The technician wants to leave this step out."""


ALWAYS = ("skip", "quit")


def ask(topic: str, question: str, choices: tuple[str, ...] = ()) -> Steps[str]:
    """The answer, stripped and in lower case.  Raises Quit and Skip for those words."""
    answer: str = yield Ask(topic, question, choices)
    answer = answer.strip().lower()
    if answer in ("quit", "q"):
        raise Quit
    if answer in ("skip", "s"):
        raise Skip
    return answer


def choose(topic: str, question: str, choices: tuple[str, ...]) -> Steps[str]:
    """One of the choices, by as many of its first letters as tell it apart; asked until it is one."""
    while True:
        answer = yield from ask(topic, question, (*choices, *ALWAYS))
        fitting = [choice for choice in choices if answer and choice.startswith(answer)]
        if len(fitting) == 1 or answer in fitting:
            return answer if answer in fitting else fitting[0]
        yield Say(f"{shown(answer)} is no answer here; allowed: {', '.join((*choices, *ALWAYS))}")


def agree(topic: str, question: str) -> Steps[bool]:
    """Yes or no."""
    return (yield from choose(topic, question, ("yes", "no"))) == "yes"


def shown(answer: str) -> str:
    """An answer as it may be repeated: whatever was typed, short and printable."""
    return repr(answer if len(answer) <= 30 else f"{answer[:27]}...") if answer else "an empty line"
