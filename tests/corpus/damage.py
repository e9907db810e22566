"""Damaged configurations, made systematically from a good one; each says where the fault is.

The damage is done to plain data or plain text, and the place of the fault is
found with PyYAML's own composer, so that the loader is not its own judge.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import yaml

Path = tuple[str | int, ...]

_RAW = "@@RAW@@"

# Plain scalars that readers of YAML differ on, or that are no numbers at all.
SURPRISES = (
    "1e3",
    "1.5e3",
    "010",
    "0o10",
    "0b11",
    "12:30",
    "1:30.5",
    "1_000",
    "1,5",
    "on",
    "yes",
    "true",
    "~",
    "null",
    "",
    ".nan",
    "nan",
    ".inf",
    "-.inf",
    "'5'",
    '"5"',
    "5 mm",
    "--5",
    "5.5.5",
    "2026-03-01",
    "[5]",
    "{a: 5}",
    "9" * 400,
    "-" + "9" * 400,
)


@dataclass(frozen=True)
class Damage:
    """A bad file: a problem must be told at the key `path`, in that line and column (from 1).

    No line: what is missing or empty has no place of its own.  `hint` must occur in the problem's hint.
    """

    label: str
    text: str
    path: str
    line: int = 0
    column: int = 0
    hint: str = ""


@dataclass(frozen=True)
class Entry:
    """A value of the good file, with its key's node where it has one."""

    path: Path
    key: yaml.Node | None
    value: yaml.Node


def dotted(path: Path) -> str:
    """`legs[2].upper_mm`."""
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
    return text


def dumped(data: Any) -> str:
    return str(yaml.dump(data, Dumper=yaml.CSafeDumper, sort_keys=False, width=10000))


def entries(text: str) -> Iterator[Entry]:
    """Every value below the top of a good file."""
    root = yaml.compose(text)
    assert root is not None
    yield from _below(root, ())


def _below(node: yaml.Node, path: Path) -> Iterator[Entry]:
    if isinstance(node, yaml.MappingNode):
        for key, value in node.value:
            yield Entry((*path, key.value), key, value)
            yield from _below(value, (*path, key.value))
    elif isinstance(node, yaml.SequenceNode):
        for index, value in enumerate(node.value):
            yield Entry((*path, index), None, value)
            yield from _below(value, (*path, index))


def _replaced(label: str, text: str, path: Path, node: yaml.Node, new: str, hint: str = "") -> Damage:
    """New text in place of a node."""
    start, end = node.start_mark, node.end_mark
    tail = text[end.index :]
    if isinstance(node, yaml.CollectionNode) and not node.flow_style:
        # A block ends where the next token starts: on a line of its own.
        new += "\n" + " " * end.column
    changed = text[: start.index] + new + tail
    line, column = (start.line + 1, start.column + 1) if new.strip() else (0, 0)
    return Damage(label, changed, dotted(path), line, column, hint)


def misspellings(word: str) -> list[str]:
    """A letter lost, two swapped, one too many."""
    middle = len(word) // 2
    swapped = word[: middle - 1] + word[middle] + word[middle - 1] + word[middle + 1 :]
    return [wrong for wrong in (word[:-1], swapped, word + "s") if wrong != word]


def removals(text: str) -> Iterator[Damage]:
    """Each key of each mapping left out in turn; whether that is bad depends on the key."""
    for entry in entries(text):
        if entry.key is not None:
            data = yaml.load(text, Loader=yaml.CSafeLoader)
            holder = data
            for part in entry.path[:-1]:
                holder = holder[part]
            del holder[entry.path[-1]]
            yield Damage(f"without {dotted(entry.path)}", dumped(data), dotted(entry.path))


def misspelt(text: str) -> Iterator[Damage]:
    for entry in entries(text):
        if entry.key is not None:
            word = str(entry.path[-1])
            for wrong in misspellings(word):
                path = (*entry.path[:-1], wrong)
                yield _replaced(dotted(path), text, path, entry.key, wrong, word)


def duplicated(text: str) -> Iterator[Damage]:
    """Each key written twice: even with the same value that is refused."""
    for entry in entries(text):
        if entry.key is not None:
            start, word = entry.key.start_mark, str(entry.path[-1])
            flow = text[: entry.value.end_mark.index].splitlines()[-1].lstrip("- ").find("{") >= 0
            first = f"{word}: 1, " if flow else f"{word}: 1\n{' ' * start.column}"
            line = start.line + 1 if flow else start.line + 2
            column = start.column + 1 + (len(first) if flow else 0)
            changed = text[: start.index] + first + text[start.index :]
            yield Damage(f"{dotted(entry.path)} twice", changed, dotted(entry.path), line, column)


def wrong_values(text: str) -> Iterator[Damage]:
    """Each number by every surprise and out of range both ways; each other value by the wrong type."""
    for entry in entries(text):
        node = entry.value
        if isinstance(node, yaml.ScalarNode) and node.tag.endswith((":int", ":float")):
            wrong: tuple[str, ...] = (*SURPRISES, "1000000000", "-1000000000", "x")
        elif isinstance(node, yaml.ScalarNode):
            wrong = (
                "12",
                "1e3",
                "true",
                "no",
                "~",
                "",
                "[a]",
                "{a: b}",
                "2026-03-01",
                "'two words'",
                "x" * 41,
            )
        else:
            wrong = ("12", "text", "~", "", "[]" if isinstance(node, yaml.MappingNode) else "{}", "[[[]]]")
        for raw in wrong:
            yield _replaced(f"{dotted(entry.path)}: {raw[:20]}", text, entry.path, node, raw)
