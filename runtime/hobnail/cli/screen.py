"""A terminal screen that is drawn over in place, by a few ANSI sequences of our own.

Knows lines of text and their width, nothing of robots.  On anything that is no
terminal, lines are simply printed.
"""

from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Sequence
from types import TracebackType
from typing import Self, TextIO

_ENTER = "\x1b[?1049h\x1b[?25l\x1b[?7l"  # second screen, no cursor, no wrapping
_LEAVE = "\x1b[?7h\x1b[?25h\x1b[?1049l"
_HOME, _REST_OF_LINE, _REST_OF_SCREEN = "\x1b[H", "\x1b[K", "\x1b[J"


class Screen:
    """Context manager; leaves the terminal as it was found, whatever happens inside."""

    def __init__(self, out: TextIO | None = None) -> None:
        self.out = out or sys.stdout

    @property
    def size(self) -> tuple[int, int]:
        """(columns, lines) that can be drawn on now.

        One column is left free: erasing the rest of a full line takes its last character.
        """
        size = shutil.get_terminal_size()
        return size.columns - 1, size.lines

    def show(self, lines: Sequence[str]) -> None:
        """Draw the lines over what was there; they must not be wider than the screen."""
        text = "".join(f"{line}{_REST_OF_LINE}\r\n" for line in lines[:-1])
        last = f"{lines[-1]}{_REST_OF_LINE}" if lines else ""
        self.out.write(f"{_HOME}{text}{last}{_REST_OF_SCREEN}")
        self.out.flush()

    def __enter__(self) -> Self:
        self.out.write(_ENTER)
        self.out.flush()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.out.write(_LEAVE)
        self.out.flush()


def is_live(out: TextIO | None = None) -> bool:
    """True when the output is a terminal that can be drawn over."""
    return (out or sys.stdout).isatty() and os.environ.get("TERM", "dumb") != "dumb"


def wants_color(out: TextIO | None = None, *, refused: bool = False) -> bool:
    """Colour on terminals only, and not when refused or NO_COLOR is set."""
    return is_live(out) and not refused and not os.environ.get("NO_COLOR")


def speaks_unicode(out: TextIO | None = None) -> bool:
    """True when block characters can be written."""
    encoding = getattr(out or sys.stdout, "encoding", None) or "ascii"
    return encoding.lower().replace("-", "") in ("utf8", "utf16", "utf32")
