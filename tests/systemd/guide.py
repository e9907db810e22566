"""The README's install guide as something that can be run: its shell blocks, by heading.

A block's first word after `sh` says who runs it: nobody there is root, a login
is that user's, and `board` needs a robot's real board and is left out here.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

REPOSITORY = Path(__file__).parents[2]
CHAPTER = "Install on a robot"
ON_A_BOARD = "board"
_FENCE = re.compile(r"^( *)```sh ?(\w*)\n(.*?)^\1```$", re.MULTILINE | re.DOTALL)


@dataclass(frozen=True)
class Block:
    """Some lines of shell, and who is to run them."""

    user: str
    script: str


def blocks(section: str) -> list[Block]:
    """The shell blocks below a heading of the guide, in order, without those for a real board."""
    text = (REPOSITORY / "README.md").read_text()
    chapter = _below(text, f"## {CHAPTER}")
    found = [
        Block(user or "root", "\n".join(line.strip() for line in script.splitlines()))
        for _, user, script in _FENCE.findall(_below(chapter, f"### {section}"))
    ]
    return [block for block in found if block.user != ON_A_BOARD]


def _below(text: str, heading: str) -> str:
    """What stands below a heading, down to the next of its level or higher."""
    level = len(heading) - len(heading.lstrip("#"))
    match = re.search(rf"^{re.escape(heading)}\n(.*?)(?=^#{{1,{level}}} |\Z)", text, re.MULTILINE | re.DOTALL)
    if match is None:
        raise LookupError(f"README.md has no heading {heading!r}")
    return match.group(1)
