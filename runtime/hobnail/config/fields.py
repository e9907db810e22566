"""Kinds of values that a configuration holds: from a YAML node to SI units, with its bounds.

A kind reads a node, says in words what is allowed, and gives its JSON Schema;
a `Field` puts a kind beside a key and the attribute that it becomes.  Which
fields there are stands in `hobnail.config.tables`.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from collections.abc import Mapping as MappingType
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, Protocol

from hobnail.config.scalars import decimal, integer, is_text, surprise
from hobnail.config.strict_yaml import Listing, Mapping, Node, Report, Scalar, shown

KGF_CM_NM = 0.0980665  # exact, by the definition of the standard gravity

# What a number in the unit of its key is in SI units (pulses stay in us).
SI: dict[str, Callable[[float], float]] = {
    "": float,
    "mm": lambda value: value / 1000.0,
    "mm/s": lambda value: value / 1000.0,
    "deg": math.radians,
    "deg/s": math.radians,
    "s/60 deg": lambda value: math.radians(60.0) / value,
    "kgf cm": lambda value: value * KGF_CM_NM,
    "ms": lambda value: value / 1000.0,
    "MHz": lambda value: value * 1e6,
    "deg a turn": lambda value: value / 360.0,
}

_NAME = r"[A-Za-z][A-Za-z0-9_-]{0,39}"


class Kind(Protocol):
    """How a value is read."""

    def read(self, node: Node, report: Report) -> Any:
        """The value in SI units; None when it is not allowed, with the problem told."""

    def allowed(self) -> str:
        """What is allowed, in words."""

    def schema(self) -> dict[str, Any]:
        """The same as JSON Schema."""


@dataclass(frozen=True, slots=True)
class Number:
    """A decimal number from `low` to `high` in `unit`."""

    low: float
    high: float
    unit: str = ""

    def read(self, node: Node, report: Report) -> float | None:
        value = decimal(node)
        if value is None:
            report.add(node, shown(node), self.allowed(), surprise(node))
        elif not self.low <= value <= self.high:
            report.add(node, f"{shown(node)} {self.unit}".rstrip(), self.allowed())
        else:
            return SI.get(self.unit, float)(value)
        return None

    def allowed(self) -> str:
        return f"a number from {self.low:g} to {self.high:g} {self.unit}".rstrip()

    def schema(self) -> dict[str, Any]:
        return {"type": "number", "minimum": self.low, "maximum": self.high}


@dataclass(frozen=True, slots=True)
class Integer:
    """A whole number; `hexadecimal` allows 0x40 as well and shows the bounds so."""

    low: int
    high: int
    hexadecimal: bool = False

    def read(self, node: Node, report: Report) -> int | None:
        value = integer(node, hexadecimal=self.hexadecimal)
        if value is not None and self.low <= value <= self.high:
            return value
        report.add(node, shown(node), self.allowed(), surprise(node) if value is None else "")
        return None

    def allowed(self) -> str:
        if self.hexadecimal:
            return f"an address from 0x{self.low:02x} to 0x{self.high:02x}"
        return f"a whole number from {self.low} to {self.high}"

    def schema(self) -> dict[str, Any]:
        return {"type": "integer", "minimum": self.low, "maximum": self.high}


@dataclass(frozen=True, slots=True)
class Text:
    """Text that matches `pattern` as a whole; `words` says so to people."""

    pattern: str = _NAME
    words: str = "a name of up to 40 letters, digits, - and _, a letter first"

    def read(self, node: Node, report: Report) -> str | None:
        if not isinstance(node, Scalar) or not re.fullmatch(self.pattern, node.text):
            report.add(node, shown(node), self.allowed())
        elif node.plain and not is_text(node.text):
            report.add(
                node, shown(node), self.allowed(), "YAML does not take this for text: put it in quotes."
            )
        else:
            return node.text
        return None

    def allowed(self) -> str:
        return self.words

    def schema(self) -> dict[str, Any]:
        return {"type": "string", "pattern": f"^(?:{self.pattern})$"}


@dataclass(frozen=True, slots=True)
class Choice:
    """One of a few words or whole numbers, each standing for a value."""

    values: MappingType[str, Any]

    def read(self, node: Node, report: Report) -> Any:
        if isinstance(node, Scalar) and node.plain and node.text in self.values:
            return self.values[node.text]
        hint = nearest(node.text, self.values) if isinstance(node, Scalar) else ""
        report.add(node, shown(node), self.allowed(), hint)
        return None

    def allowed(self) -> str:
        return " or ".join(self.values)

    def schema(self) -> dict[str, Any]:
        return {"enum": [int(word) if re.fullmatch("-?[0-9]+", word) else word for word in self.values]}


@dataclass(frozen=True, slots=True)
class NumberOr:
    """A number, or a word that stands for None in the robot."""

    number: Number
    word: str

    def read(self, node: Node, report: Report) -> float | str | None:
        if isinstance(node, Scalar) and node.plain and node.text == self.word:
            return self.word
        before = Report(report.file)
        value = self.number.read(node, before)
        for problem in before.problems():
            report.add(node, problem.found, self.allowed(), problem.hint)
        return value

    def allowed(self) -> str:
        return f"{self.word}, or {self.number.allowed()}"

    def schema(self) -> dict[str, Any]:
        return {"anyOf": [{"const": self.word}, self.number.schema()]}


@dataclass(frozen=True, slots=True)
class Several:
    """A list of `least` to `most` values of one kind, read as a tuple; `what` names them.

    `ascending` asks each number to be larger than the one before.
    """

    item: Kind
    least: int
    most: int
    what: str = ""
    ascending: bool = False

    def read(self, node: Node, report: Report) -> tuple[Any, ...] | None:
        if not isinstance(node, Listing) or not self.least <= len(node.items) <= self.most:
            report.add(node, shown(node), self.allowed())
            return None
        values = tuple(self.item.read(item, report) for item in node.items)
        if None in values:
            return None
        if self.ascending:
            for number, (before, after) in enumerate(pairwise(values), start=1):
                if after <= before:
                    item = node.items[number]
                    report.add(
                        item, shown(item), f"more than {shown(node.items[number - 1])}, the one before"
                    )
                    return None
        return values

    def allowed(self) -> str:
        count = f"{self.least}" if self.least == self.most else f"{self.least} to {self.most}"
        what = f" ({self.what})" if self.what else ""
        return f"a list of {count}{what}, each {self.item.allowed()}"

    def schema(self) -> dict[str, Any]:
        return {
            "type": "array",
            "items": self.item.schema(),
            "minItems": self.least,
            "maxItems": self.most,
        }


@dataclass(frozen=True, slots=True)
class Row:
    """A list of values of different kinds, such as (deg, us)."""

    kinds: tuple[Kind, ...]

    def read(self, node: Node, report: Report) -> tuple[Any, ...] | None:
        if not isinstance(node, Listing) or len(node.items) != len(self.kinds):
            report.add(node, shown(node), self.allowed())
            return None
        values = tuple(kind.read(item, report) for kind, item in zip(self.kinds, node.items, strict=True))
        return None if None in values else values

    def allowed(self) -> str:
        return f"[{', '.join(kind.allowed() for kind in self.kinds)}]"

    def schema(self) -> dict[str, Any]:
        return {
            "type": "array",
            "prefixItems": [kind.schema() for kind in self.kinds],
            "minItems": len(self.kinds),
            "maxItems": len(self.kinds),
        }


@dataclass(frozen=True, slots=True)
class Field:
    """A key of a section: its kind and bounds, the attribute that it becomes, and what it means.

    `becomes` is empty where something else than an attribute is made of it.
    Not `required`: left out, the default of the attribute stands.
    `inherited`: may stand in the section of defaults instead.
    """

    key: str
    becomes: str
    kind: Kind
    note: str
    required: bool = True
    inherited: bool = False


@dataclass(slots=True)
class Section:
    """A mapping as read: `values` by key in SI units, only those that were good."""

    node: Mapping
    fields: tuple[Field, ...]
    values: dict[str, Any] = field(default_factory=dict)

    def at(self, key: str) -> Node:
        """The node of `key`, or of the whole section when it is not written."""
        return self.node.entries.get(key, self.node)

    def arguments(self) -> dict[str, Any]:
        """Attribute -> value, for the dataclass that the section becomes."""
        return {
            each.becomes: self.values[each.key]
            for each in self.fields
            if each.becomes and each.key in self.values
        }


@dataclass(frozen=True, slots=True)
class Group:
    """A nested mapping with its own fields.

    `partial`: any of them may be left out.  `inherits` names the section of
    defaults, for messages.  `short`: a bare scalar stands for this one key.
    """

    fields: tuple[Field, ...]
    partial: bool = False
    inherits: str = ""
    short: str = ""

    def read(self, node: Node, report: Report) -> Section | None:
        if self.short and isinstance(node, Scalar):
            node = Mapping(
                path=node.path,
                line=node.line,
                column=node.column,
                entries={self.short: node},
                keys={self.short: node},
            )
        if not isinstance(node, Mapping):
            report.add(node, shown(node), self.allowed())
            return None
        section = Section(node, self.fields)
        known = {each.key: each for each in self.fields}
        for key, entry in node.entries.items():
            if report.full:
                return section
            if key not in known:
                hint = (
                    "Write the values out: there are no merge keys." if key == "<<" else nearest(key, known)
                )
                report.add(node.keys[key], "unknown key", ", ".join(known), hint)
                continue
            value = known[key].kind.read(entry, report)
            if value is not None:
                section.values[key] = value
        if not self.partial:
            for each in self.fields:
                if each.required and each.key not in node.entries:
                    where = f"Write it here or in {self.inherits}." if each.inherited else ""
                    report.add(node, "nothing", each.kind.allowed(), where, key=each.key)
        return section

    def allowed(self) -> str:
        return f"a mapping with {', '.join(each.key for each in self.fields)}"

    def schema(self) -> dict[str, Any]:
        required = [each.key for each in self.fields if each.required and not each.inherited]
        schema: dict[str, Any] = {
            "type": "object",
            "additionalProperties": False,
            "properties": {
                each.key: {**each.kind.schema(), "description": each.note} for each in self.fields
            },
        }
        if required and not self.partial:
            schema["required"] = required
        if self.short:
            bare = next(each.kind.schema() for each in self.fields if each.key == self.short)
            return {"anyOf": [bare, schema]}
        return schema


@dataclass(frozen=True, slots=True)
class Named:
    """A mapping from names to sections of one kind; `what` says whose names they are."""

    item: Group
    what: str

    def read(self, node: Node, report: Report) -> dict[str, Section] | None:
        if not isinstance(node, Mapping):
            report.add(node, shown(node), self.allowed())
            return None
        sections = {name: self.item.read(entry, report) for name, entry in node.entries.items()}
        return {name: section for name, section in sections.items() if section is not None}

    def allowed(self) -> str:
        return f"a mapping from names of {self.what} to what was measured there"

    def schema(self) -> dict[str, Any]:
        return {"type": "object", "additionalProperties": self.item.schema()}


def nearest(word: str, known: MappingType[str, Any] | list[str]) -> str:
    """`Did you mean upper_mm?`, or nothing."""
    from difflib import get_close_matches  # only needed for bad files

    match = get_close_matches(word[:80], list(known), n=1, cutoff=0.6)
    return f"Did you mean {match[0]}?" if match else ""
