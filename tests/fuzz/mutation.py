"""Damage done at random to a good YAML file, aware of its structure: values, lines, bytes.

The same seed gives the same damage.  Where the values of a file are is found with
PyYAML's own composer; what bounds a number has, in the tables of the loader.
Nothing here judges the outcome: see `fuzz.fuzz_files`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from random import Random

import yaml

from corpus.damage import SURPRISES
from hobnail.config.fields import Choice, Field, Group, Integer, Kind, Number, NumberOr, Row, Several
from hobnail.config.tables import ROBOT
from hobnail.service.route_file import ROUTE

Bounds = dict[str, list[tuple[float, float]]]
Edit = tuple[int, int, str]  # start, end, what to write there

WORDS = (
    *SURPRISES,
    "text",
    "auto",
    "forward",
    "'quoted'",
    "[]",
    "{}",
    "[1, 2]",
    "[[0, 500], [90, 1500], [90, 2500]]",
    "{time: 0, travel: 0, lift: 0}",
    "0x40",
    "0.0000000000000000000000000001",
    "-0.0",
    "é",
    "x" * 2000,
    "[" * 40 + "]" * 40,
)
_TEXTS = (
    *("", " ", "  ", "\n", "\r", "\r\n", "\t", "- ", ": ", ":", "?", "? ", ", ", "#", " #", "[", "]"),
    *("{", "}", "&a ", "*a", "!t ", "!!str ", "!!python/object:os.system x", "<<: ", "'", '"', "\\"),
    *("|\n", ">-\n", "|2", "---\n", "...\n", "%YAML 1.2\n", "%TAG ! x\n", "@", "`", "~", "=", "\x00"),
    *("\x7f", "\x85", "\xa0", "\u2028", "\ufeff", "\ufffe", "\ud800", "\U0001f9ed", "\u202e", "1e309"),
    *("-", "--1", ".", "9" * 50, "0", "00", "legs: []\n", "name: x\n", "- a\n", "  - {a: [b, {c: d}]}\n"),
)
PIECES = (
    *(text.encode("utf-8", "surrogatepass") for text in _TEXTS),
    *(b"\xff", b"\xc3", b"\xed\xa0\x80", b"\xf8\x88\x80\x80\x80"),
)
LONGEST = 1 << 17  # bytes: a file does not grow past that by doubling its parts


def bounds_by_key(*tables: Iterable[Field]) -> Bounds:
    """The bounds of every number of the tables, by its key, whatever section that is in."""
    found: Bounds = {}
    for table in tables:
        for each in table:
            _collect(each.key, each.kind, found)
    return found


def _collect(key: str, kind: Kind, found: Bounds) -> None:
    match kind:
        case Number() | Integer():
            found.setdefault(key, []).append((kind.low, kind.high))
        case NumberOr():
            _collect(key, kind.number, found)
        case Several():
            _collect(key, kind.item, found)
        case Row():
            for part in kind.kinds:
                _collect(key, part, found)
        case Group():
            for each in kind.fields:
                _collect(each.key, each.kind, found)
        case Choice():
            found.setdefault(key, []).append((-1.0, 1.0))


BOUNDS = bounds_by_key(ROBOT, ROUTE.fields)


class Source:
    """A good file, with the places of its values."""

    def __init__(self, name: str, text: str) -> None:
        self.name = name
        self.text = text
        self.scalars: list[tuple[str, int, int]] = []  # key, start, end
        self.parts: list[tuple[int, int]] = []  # values and whole entries of any size
        root = yaml.compose(text)
        assert root is not None
        self._walk(root, "")

    def _walk(self, node: yaml.Node, key: str) -> None:
        start, end = node.start_mark.index, node.end_mark.index
        self.parts.append((start, end))
        if isinstance(node, yaml.MappingNode):
            for name, value in node.value:
                self.parts.append((name.start_mark.index, name.end_mark.index))
                self.parts.append((name.start_mark.index, value.end_mark.index))
                self._walk(value, name.value)
        elif isinstance(node, yaml.SequenceNode):
            for value in node.value:
                self._walk(value, key)
        else:
            self.scalars.append((key, start, end))


def mutated(source: Source, others: list[Source], random: Random) -> bytes:
    """The file with one to six damages, most of them to its values."""
    text = source.text
    levels = random.choices(("value", "part", "line", "byte"), (6, 2, 2, 2), k=_count(random))
    edits: list[Edit] = []
    for level in levels:
        if level == "value":
            edits.append(_value(source, random))
        elif level == "part":
            edits += _part(source, random.choice(others), random)
    text = _edited(text, edits)
    lines = levels.count("line")
    if lines:
        text = _lines(text, lines, random)
    data = text.encode("utf-8", "surrogatepass")
    for _ in range(levels.count("byte")):
        data = _bytes(data, random)
    return data


def _count(random: Random) -> int:
    return random.choices((1, 2, 3, 4, 6), (10, 6, 3, 1, 1))[0]


def _edited(text: str, edits: list[Edit]) -> str:
    """The edits done from the end to the start; those that overlap a later one are left out."""
    border = len(text)
    for start, end, new in sorted(edits, reverse=True):
        if end <= border:
            text = text[:start] + new + text[end:]
            border = start
    return text


# ---- values


def _value(source: Source, random: Random) -> Edit:
    key, start, end = random.choice(source.scalars)
    return start, end, _new_value(key, source.text[start:end], random)


def _new_value(key: str, old: str, random: Random) -> str:
    try:
        number = float(old)
    except ValueError:
        return random.choice((*WORDS, old[:-1], old + old, old.upper(), old + "x"))
    low, high = random.choice(BOUNDS.get(key) or [(-1000.0, 1000.0)])
    step = random.choice((1.0, 0.001, 1e-9))
    near = number * random.choice((0.2, 0.5, 0.8, 0.95, 0.999, 1.001, 1.05, 1.25, 2.0, 5.0, 10.0, 100.0))
    makers: tuple[Callable[[], float | None], ...] = (
        lambda: number + random.choice((-1, 1)) * step,
        lambda: near,
        lambda: near,
        lambda: random.uniform(low, high),
        lambda: float(random.randint(int(low), int(high) + 1)),
        lambda: random.choice((low, high, low - step, high + step)),
        lambda: random.choice((0.0, -number, 1e-12, 1e12, 1e30)),
        lambda: None,
    )
    new = random.choice(makers)()
    return random.choice(WORDS) if new is None else decimal(new)


def decimal(value: float) -> str:
    """A number in decimal notation, without exponent."""
    text = f"{value:.12f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


# ---- parts


def _part(source: Source, other: Source, random: Random) -> list[Edit]:
    """A part left out, written twice, replaced by another, or two of them swapped."""
    text = source.text
    start, end = random.choice(source.parts)
    action = random.randrange(5)
    if action == 0:
        return [(start, end, "")]
    if action == 1:
        return [(end, end, random.choice(("", "\n", ", ", " ", "\n  - ")) + text[start:end])]
    if action == 2:
        from_start, from_end = random.choice(other.parts)
        return [(start, end, other.text[from_start:from_end])]
    if action == 3:
        return [(start, end, random.choice(WORDS))]
    start2, end2 = random.choice(source.parts)
    if start2 >= end or start >= end2:
        return [(start, end, text[start2:end2]), (start2, end2, text[start:end])]
    return [(start, end, text[start2:end2])]


# ---- lines


def _lines(text: str, count: int, random: Random) -> str:
    lines = text.split("\n")
    for _ in range(count):
        k = random.randrange(len(lines))
        m = min(k + random.choice((1, 1, 1, 2, 5, 20)), len(lines))
        action = random.randrange(7)
        if action == 0:
            other = random.randrange(len(lines))
            lines[k], lines[other] = lines[other], lines[k]
        elif action == 1:
            lines[k:k] = lines[k:m]
        elif action == 2:
            del lines[k:m]
        elif action == 3:
            space = " " * random.choice((1, 2, 2, 2, 4, 9))
            lines[k:m] = [space + line for line in lines[k:m]]
        elif action == 4:
            lines[k:m] = [line.removeprefix(random.choice((" ", "  "))) for line in lines[k:m]]
        elif action == 5:
            lines[k:m] = ["".join(lines[k:m])]
        else:
            del lines[k:]
        lines = lines or [""]
    return "\n".join(lines)


# ---- bytes


def _bytes(data: bytes, random: Random) -> bytes:
    start = random.randrange(len(data) + 1)
    end = min(start + random.choice((0, 0, 1, 1, 2, 10, 100, 1000)), len(data))
    action = random.randrange(6)
    if action == 0:
        return data[:start] + random.choice(PIECES) + data[end:]
    if action == 1:
        return data[:start] + bytes(random.randrange(256) for _ in range(random.randrange(1, 8))) + data[end:]
    if action == 2 and start < len(data):
        return data[:start] + bytes((data[start] ^ 1 << random.randrange(8),)) + data[start + 1 :]
    if action == 3:
        return data[:start]
    if action == 4:
        times = random.choice((1, 2, 50))
        return (data[:start] + data[start:end] * times + data[start:])[:LONGEST]
    return data[:start] + random.choice(PIECES) * random.choice((1, 3, 200)) + data[end:]
