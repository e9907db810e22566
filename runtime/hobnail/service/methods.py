"""The requests that the service answers, as one table: names, parameters in SI units, bounds.

The protocol checks parameters against it; `describe` and the documentation are
made from it.  Bounds that hang on the robot (its envelope, its gaits) are not
here: whoever carries out the request knows them.
"""

from __future__ import annotations

import difflib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum

SHOWN_CHARS = 60  # of a wrong value, in a message


class ParamsError(Exception):
    """Parameters that do not fit; the message names the one, what was found, what is allowed."""


class Kind(StrEnum):
    """What JSON value a parameter takes."""

    NUMBER = "number"  # given on as float
    INTEGER = "integer"
    TEXT = "text"
    TRUE = "true"  # nothing else: leaving it out says the contrary
    PAIR = "pair of numbers"  # given on as (float, float)
    OBJECTS = "list of objects"


@dataclass(frozen=True, slots=True)
class Param:
    """One parameter.

    `lowest` and `highest` bound a number, both numbers of a pair, the length of
    a text or a list.  An optional one that is left out, or null, is given on as
    `default`, or not at all where that is None.
    """

    name: str
    kind: Kind
    doc: str
    lowest: float = 0.0
    highest: float = 0.0
    unit: str = ""
    required: bool = False
    default: object = None

    def allowed(self) -> str:
        """What may stand here, in words."""
        span = f"{self.lowest:g} to {self.highest:g}"
        unit = f" {self.unit}" if self.unit else ""
        match self.kind:
            case Kind.NUMBER:
                return f"a number, {span}{unit}"
            case Kind.INTEGER:
                return f"a whole number, {span}{unit}"
            case Kind.TEXT:
                return f"text of {span} printable characters"
            case Kind.TRUE:
                return "true"
            case Kind.PAIR:
                return f"two numbers [x, y], each {span}{unit}"
            case Kind.OBJECTS:
                return f"a list of {span} objects"

    def check(self, value: object) -> object:
        """`value` as it is given on; ParamsError when it does not fit."""
        fits = False
        match self.kind:
            case Kind.NUMBER:
                if isinstance(value, (int, float)) and self._spans(value):
                    return float(value)
            case Kind.PAIR:
                if isinstance(value, list) and len(value) == 2 and all(map(self._spans, value)):
                    return (float(value[0]), float(value[1]))
            case Kind.INTEGER:
                fits = isinstance(value, int) and self._spans(value)
            case Kind.TEXT:
                fits = isinstance(value, str) and self._spans(len(value)) and value.isprintable()
            case Kind.TRUE:
                fits = value is True
            case Kind.OBJECTS:
                fits = (
                    isinstance(value, list)
                    and self._spans(len(value))
                    and all(isinstance(entry, dict) for entry in value)
                )
        if fits:
            return value
        raise ParamsError(f"{self.name}: found {shown(value)}; allowed: {self.allowed()}")

    def _spans(self, value: object) -> bool:
        return (
            isinstance(value, (int, float))
            and not isinstance(value, bool)
            and self.lowest <= value <= self.highest
        )


@dataclass(frozen=True, slots=True)
class Method:
    """One request.  Parameters by position come in the order of `params`; of `one_of`, where
    given, exactly one must be there."""

    name: str
    doc: str
    params: tuple[Param, ...] = ()
    one_of: tuple[str, ...] = ()

    def check(self, given: Mapping[str, object] | Sequence[object] | None) -> dict[str, object]:
        """Parameters by name, checked and converted; ParamsError at the first that does not fit."""
        names = [param.name for param in self.params]
        if given is None:
            given = {}
        elif not isinstance(given, Mapping):
            if len(given) > len(names):
                raise ParamsError(
                    f"found {len(given)} by position; allowed: at most {len(names)}: "
                    f"{', '.join(names) or 'none'}"
                )
            given = dict(zip(names, given, strict=False))
        else:
            for name in given:
                if name not in names:
                    raise ParamsError(
                        f"{shown(name)}: no such parameter{nearest(name, names)}; allowed: "
                        f"{', '.join(names) or 'none'}"
                    )
        checked: dict[str, object] = {}
        for param in self.params:
            value = given.get(param.name)
            if value is not None:
                checked[param.name] = param.check(value)
            elif param.required:
                raise ParamsError(f"{param.name}: missing; allowed: {param.allowed()}")
            elif param.default is not None:
                checked[param.name] = param.default
        if self.one_of and sum(name in checked for name in self.one_of) != 1:
            found = ", ".join(name for name in self.one_of if name in checked) or "none"
            raise ParamsError(f"found {found}; allowed: exactly one of {' and '.join(self.one_of)}")
        return checked

    def salvage(self, given: object) -> dict[str, object]:
        """What is right of parameters that do not fit as a whole; defaults for the rest."""
        if isinstance(given, list):
            given = dict(zip((param.name for param in self.params), given, strict=False))
        kept: dict[str, object] = {}
        for param in self.params:
            value = given.get(param.name) if isinstance(given, dict) else None
            try:
                checked = param.default if value is None else param.check(value)
            except ParamsError:
                checked = param.default
            if checked is not None:
                kept[param.name] = checked
        return kept


def shown(value: object) -> str:
    """A value as JSON for a message, cut where it is long."""
    text = json.dumps(value)
    return text if len(text) <= SHOWN_CHARS else f"{text[:SHOWN_CHARS]}..."


def nearest(name: str, names: Iterable[str]) -> str:
    """`` (did you mean NAME?)``, or nothing when no name is near."""
    near = difflib.get_close_matches(name[:SHOWN_CHARS], sorted(names), n=1)
    return f" (did you mean {near[0]}?)" if near else ""


# Far outside of any legged robot; they keep every product of two finite.
_SPEED = 100.0
_FAR_M = 1000.0


def _angle(axis: str) -> Param:
    return Param(f"{axis}_rad", Kind.NUMBER, f"{axis} angle", -3.2, 3.2, "rad")


_METHODS = (
    Method(
        "walk",
        "Move the body at a planar velocity until `ttl_s` runs out. Claims the command.",
        (
            Param("vx", Kind.NUMBER, "forward velocity at the pivot", -_SPEED, _SPEED, "m/s", default=0.0),
            Param("vy", Kind.NUMBER, "leftward velocity at the pivot", -_SPEED, _SPEED, "m/s", default=0.0),
            Param("yaw_rate", Kind.NUMBER, "turn to the left", -_SPEED, _SPEED, "rad/s", default=0.0),
            Param("pivot", Kind.PAIR, "point in the body frame", -_FAR_M, _FAR_M, "m", default=(0.0, 0.0)),
            Param("ttl_s", Kind.NUMBER, "life of command and claim; else as configured", 0.05, 10.0, "s"),
        ),
    ),
    Method("stand", "Wake, rise or stop walking, and stand."),
    Method("rest", "Lie down, belly on the ground, pulses on."),
    Method("off", "Lie down, then end all pulses."),
    Method(
        "posture",
        "Move the body over its standing feet; what is left out stays as it is.",
        (
            Param("height_m", Kind.NUMBER, "body origin above the ground", 0.0, _FAR_M, "m"),
            _angle("roll"),
            _angle("pitch"),
            _angle("yaw"),
            Param("lean_m", Kind.PAIR, "shift forward and to the left", -_FAR_M, _FAR_M, "m"),
        ),
    ),
    Method(
        "gait",
        "Change the gait, while walking too.",
        (Param("name", Kind.TEXT, "one of the gaits that `describe` lists", 1, 64, required=True),),
    ),
    Method(
        "stop",
        "Stop from any state, and latch it. Any client may, and wrong parameters do not hinder it.",
        (
            Param("category", Kind.INTEGER, "0: cut at once; 1: plant, crouch, cut", 0, 1, default=1),
            Param("reason", Kind.TEXT, "for the log and for those who ask", 0, 200, default=""),
        ),
    ),
    Method("reset", "Clear a latched stop, and faults whose cause is gone. Moves nothing."),
    Method("state", "Everything there is to know about this moment."),
    Method("describe", "What the robot is and can do: legs, gaits, limits, requests."),
    Method(
        "route",
        "Walk a list of steps, or give up the one being walked.",
        (
            Param("steps", Kind.OBJECTS, "steps as in a route file", 1, 1000),
            Param("cancel", Kind.TRUE, "give up the route being walked, and stand"),
        ),
        one_of=("steps", "cancel"),
    ),
    Method(
        "watch",
        "Have `state` notifications sent over this connection.",
        (Param("rate_hz", Kind.NUMBER, "at most one a tick; 0 ends them", 0.0, 100.0, "Hz", default=10.0),),
    ),
)

METHODS: Mapping[str, Method] = {method.name: method for method in _METHODS}


def describe(methods: Mapping[str, Method] = METHODS) -> list[dict[str, object]]:
    """The table as JSON-able data, for the answer to `describe`."""
    return [
        {
            "name": method.name,
            "doc": method.doc,
            "params": [
                {
                    "name": param.name,
                    "allowed": param.allowed(),
                    "required": param.required,
                    "default": param.default,
                    "doc": param.doc,
                }
                for param in method.params
            ],
        }
        for method in methods.values()
    ]


def markdown(methods: Mapping[str, Method] = METHODS) -> str:
    """The table as Markdown, for the documentation."""
    lines = ["| request | parameter | allowed | left out | meaning |", "| --- | --- | --- | --- | --- |"]
    for method in methods.values():
        lines.append(f"| `{method.name}` | | | | {method.doc} |")
        for param in method.params:
            left_out = "refused" if param.required else json.dumps(param.default).replace("null", "")
            lines.append(f"| | `{param.name}` | {param.allowed()} | {left_out} | {param.doc} |")
    return "\n".join(lines) + "\n"
