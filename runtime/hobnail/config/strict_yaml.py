"""Strict YAML: a file's text -> nodes that know their line, column and key path; no units.

Nothing is interpreted here: a scalar stays the text that was written, so that
no YAML rule turns `on` into true or `010` into 8 behind the reader's back.
What a configuration does not need is refused: tags, anchors, aliases, further
documents, tabs, byte order marks, deep nesting.  Which keys and values are
allowed is not known here; see `hobnail.config.fields`.
"""

from __future__ import annotations

import re
import stat
from dataclasses import dataclass, field
from pathlib import Path
from typing import NoReturn

import yaml

from hobnail.errors import Problem

MAX_BYTES = 1 << 20
MAX_DEPTH = 10
MAX_PROBLEMS = 100

# The C parser is some ten times as fast; both give the same events.
_LOADER = getattr(yaml, "CBaseLoader", yaml.BaseLoader)

# YAML takes NEL, LS and PS as line breaks, which no editor shows as such.
_BAD_CHARACTER = re.compile(
    "[^\n\r\x20-\x7e\xa0-\u2027\u202a-\ud7ff\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]"
)


@dataclass(slots=True, kw_only=True)
class Node:
    """A value as written; `line` and `column` count from 1."""

    path: str
    line: int
    column: int


@dataclass(slots=True, kw_only=True)
class Scalar(Node):
    """`plain` is False for a quoted or block scalar, which is text whatever it looks like."""

    text: str
    plain: bool


@dataclass(slots=True, kw_only=True)
class Listing(Node):
    """A YAML sequence."""

    items: list[Node] = field(default_factory=list)


@dataclass(slots=True, kw_only=True)
class Mapping(Node):
    """A YAML mapping; `keys` holds each key's own node, for its position."""

    entries: dict[str, Node] = field(default_factory=dict)
    keys: dict[str, Scalar] = field(default_factory=dict)

    def overlaid(self, other: Mapping) -> Mapping:
        """`other` with what it lacks taken from here; nested mappings alike.

        Each node keeps the path and position of the place where it was written.
        """
        merged = Mapping(path=other.path, line=other.line, column=other.column)
        merged.keys = {**self.keys, **other.keys}
        merged.entries = {**self.entries, **other.entries}
        for key, below in self.entries.items():
            # A mapping that `other` lacks becomes its own, so that a key missing in it is missed there.
            bare = Mapping(path=f"{other.path}.{key}", line=other.line, column=other.column)
            above = other.entries.get(key, bare)
            if isinstance(below, Mapping) and isinstance(above, Mapping):
                merged.entries[key] = below.overlaid(above)
        return merged


class Report:
    """Collects the problems of one file, each once, up to a number that a person can read."""

    def __init__(self, file: str) -> None:
        self.file = file
        self._problems: dict[Problem, None] = {}

    @property
    def full(self) -> bool:
        """True when adding more would help nobody."""
        return len(self._problems) >= MAX_PROBLEMS

    def add(self, node: Node | None, found: str, allowed: str, hint: str = "", *, key: str = "") -> None:
        """Note a problem at `node` (None: the whole file); `key` names an entry missing there."""
        if self.full:
            return
        path = node.path if node else ""
        if key:
            path = f"{path}.{key}" if path else key
        line, column = (node.line, node.column) if node else (0, 0)
        self._problems[Problem(self.file, line, column, path, found, allowed, hint)] = None

    def problems(self) -> list[Problem]:
        """What was found, in the order of the file."""
        found = sorted(self._problems, key=lambda problem: (problem.line, problem.column))
        if self.full:
            more = f"{MAX_PROBLEMS} problems, and stopped looking"
            found.append(Problem(self.file, 0, 0, "", more, "none", "Mend these and check again."))
        return found


def shown(node: Node) -> str:
    """What was written, short enough for a message."""
    if isinstance(node, Scalar):
        text = node.text if len(node.text) <= 40 else node.text[:37] + "..."
        if not node.plain or not text.isprintable():  # plain text may go on over empty lines
            return repr(text)
        return text or "nothing"
    if isinstance(node, Listing):
        return f"a list of {len(node.items)}"
    return "a mapping"


def read_file(path: Path, report: Report) -> bytes | None:
    """The bytes of a regular file of sane size; None, with the problem told, when it is not one."""
    allowed = "a readable YAML file"
    try:
        # A pipe or a device would block or never end.
        if not stat.S_ISREG(path.stat().st_mode):
            kind = "a directory" if path.is_dir() else "neither a file nor a directory"
            report.add(None, kind, allowed, "Give the path of the file itself.")
            return None
        with path.open("rb") as file:
            data = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        report.add(None, "no such file", allowed, "Check the path.")
        return None
    except (OSError, ValueError) as error:  # ValueError: a NUL in the path
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        report.add(None, reason, allowed, "Check the path and its permissions.")
        return None
    if len(data) > MAX_BYTES:
        report.add(
            None,
            f"more than {MAX_BYTES // 1024} KiB",
            f"at most {MAX_BYTES // 1024} KiB",
            "Is this the right file?",
        )
        return None
    return data


def parse(data: bytes, report: Report) -> Mapping | None:
    """The file's top mapping; None, with the problem told, when it cannot be read as one."""
    text = _decoded(data, report)
    if text is None:
        return None
    composer = _Composer(text, report)
    try:
        root = composer.document()
    except _RefusedError:
        return None
    except yaml.MarkedYAMLError as error:
        node = _place(text)  # the end; the C parser tells a line beyond it where a last line is cut short
        if mark := error.problem_mark or error.context_mark:
            node.line, node.column = min((mark.line + 1, mark.column + 1), (node.line, node.column))
        node.path = composer.path
        what = " ".join(part for part in (error.context, error.problem) if part)
        report.add(
            node, what or "broken YAML", "YAML", "Check the indentation, colons and brackets here and above."
        )
        return None
    except yaml.YAMLError as error:
        report.add(None, str(error), "YAML")
        return None
    if root is None or (isinstance(root, Scalar) and root.plain and not root.text):
        report.add(None, "an empty file", "a mapping of keys to values")
        return None
    if not isinstance(root, Mapping):
        report.add(root, shown(root), "a mapping of keys to values")
        return None
    return root


def _decoded(data: bytes, report: Report) -> str | None:
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        before = data[: error.start].decode("utf-8")
        node = _place(before)
        report.add(node, f"byte 0x{data[error.start]:02x}", "UTF-8 text", "Save the file as UTF-8.")
        return None
    bad = _BAD_CHARACTER.search(text)
    if bad:
        code = ord(bad.group())
        if code == 0xFEFF and bad.start() == 0:
            report.add(
                _place(""), "a byte order mark", "UTF-8 without one", "Save the file as UTF-8 without BOM."
            )
        elif bad.group() == "\t":
            report.add(
                _place(text[: bad.start()]), "a tab", "spaces", "Replace every tab in the file by spaces."
            )
        else:
            report.add(_place(text[: bad.start()]), f"character U+{code:04X}", "printable text")
        return None
    return text


def _place(before: str) -> Node:
    """The place that follows the text `before`."""
    lines = re.split("\r\n|\r|\n", before)
    return Node(path="", line=len(lines), column=len(lines[-1]) + 1)


class _RefusedError(Exception):
    """Reading cannot go on; the problem has been told."""


class _Composer:
    """Builds nodes from parser events; `path` is the key path being read."""

    def __init__(self, text: str, report: Report) -> None:
        self._loader = _LOADER(text)
        end = _place(text)
        self._end = (end.line, end.column)
        self._report = report
        self.path = ""

    def document(self) -> Node | None:
        try:
            self._loader.get_event()  # stream start
            event = self._loader.get_event()
            if isinstance(event, yaml.StreamEndEvent):
                return None
            root = self._node(self._loader.get_event(), "", 0)
            self._loader.get_event()  # document end
            event = self._loader.get_event()
            if not isinstance(event, yaml.StreamEndEvent):
                self._refuse(
                    event, "a second document", "one document a file", "Remove `---` and what follows it."
                )
            return root
        finally:
            self._loader.dispose()

    def _node(self, event: yaml.Event, path: str, depth: int) -> Node:
        self.path = path
        line, column = self._position(event)
        tag = getattr(event, "tag", None)
        if getattr(event, "anchor", None) is not None:  # an alias has one, too
            self._refuse(
                event, "an anchor or alias", "values written out", "Write the value again, without & and *."
            )
        if tag is not None:
            self._refuse(event, f"the tag {tag[:40]!r}", "values without tags", "Remove the tag.")
        if isinstance(event, yaml.ScalarEvent):
            return Scalar(path=path, line=line, column=column, text=event.value, plain=not event.style)
        if depth >= MAX_DEPTH:
            self._refuse(event, "lists or mappings nested too deep", f"at most {MAX_DEPTH} levels")
        if isinstance(event, yaml.SequenceStartEvent):
            listing = Listing(path=path, line=line, column=column)
            while not isinstance(event := self._loader.get_event(), yaml.SequenceEndEvent):
                listing.items.append(self._node(event, f"{path}[{len(listing.items)}]", depth + 1))
            return listing
        mapping = Mapping(path=path, line=line, column=column)
        while not isinstance(event := self._loader.get_event(), yaml.MappingEndEvent):
            self._entry(mapping, event, depth)
        return mapping

    def _entry(self, mapping: Mapping, event: yaml.Event, depth: int) -> None:
        if not isinstance(event, yaml.ScalarEvent):
            self._refuse(event, "a key that is not a word", "words as keys")
        name = event.value
        word = name if re.fullmatch("[\\w<-]{1,60}", name) else repr(name[:40])
        path = f"{mapping.path}.{word}" if mapping.path else word
        key = self._node(event, path, depth)
        value = self._node(self._loader.get_event(), path, depth + 1)
        self.path = mapping.path
        assert isinstance(key, Scalar)
        if name in mapping.keys:
            first = mapping.keys[name].line
            self._report.add(
                key, f"a second {word}", "each key once", f"The first is in line {first}; keep one of them."
            )
            return
        mapping.keys[name] = key
        mapping.entries[name] = value

    def _refuse(self, event: yaml.Event, found: str, allowed: str, hint: str = "") -> NoReturn:
        line, column = self._position(event)
        self._report.add(Node(path=self.path, line=line, column=column), found, allowed, hint)
        raise _RefusedError

    def _position(self, event: yaml.Event) -> tuple[int, int]:
        mark = event.start_mark
        if not mark:
            return (0, 0)
        # What is missing at the end of a file, the C parser may place beyond it.
        return min((mark.line + 1, mark.column + 1), self._end)
