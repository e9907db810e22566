"""Questions and answers on a terminal or through a pipe, a line each; and signals that must not be lost.

Answers from a pipe are shown after their questions, so that what is printed reads
as a record.
"""

from __future__ import annotations

import contextlib
import io
import shutil
import signal
import sys
import textwrap
import threading
from collections.abc import Iterator
from typing import IO, Any, NoReturn

from hobnail.cli.view import printable
from hobnail.errors import InputEndedError
from hobnail.workshop.calibrate.effects import Ask

LONGEST_ANSWER = 1000  # bytes; the rest of a line is dropped
WIDEST = 100
ENDING = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGQUIT)


class Dialogue:
    """Tells on stdout and asks on stdin."""

    def __init__(self) -> None:
        source = sys.stdin or io.StringIO()  # there is none where it was closed
        self._source: IO[Any] = getattr(source, "buffer", source)
        self._echo = not source.isatty()

    def say(self, text: str) -> None:
        """Tell."""
        print("\n".join(wrapped(line) for line in text.split("\n")), flush=True)

    def ask(self, question: Ask) -> str:
        """The line that was answered.  Raises InputEndedError when there is none."""
        hint = f" [{'/'.join(question.choices)}]" if question.choices else ""
        print(f"{wrapped(question.question + hint)} ", end="", flush=True)
        line = self._line()
        if line is None:
            print(flush=True)
            raise InputEndedError("the answers ended before the questions did; what was kept stays kept")
        if self._echo:
            print(printable(line), flush=True)
        return line

    def _line(self) -> str | None:
        raw = self._source.readline(LONGEST_ANSWER)
        line: str = raw.decode("utf-8", "replace") if isinstance(raw, bytes) else raw
        if not line:
            return None
        rest = line
        while rest and not rest.endswith("\n"):
            raw = self._source.readline(LONGEST_ANSWER)
            rest = raw.decode("utf-8", "replace") if isinstance(raw, bytes) else raw
        return line.strip()


def wrapped(line: str) -> str:
    """A line, printable, as several of the terminal's width that keep its indent."""
    text = line.lstrip(" ")
    indent = " " * (len(line) - len(text))
    width = min(WIDEST, max(40, shutil.get_terminal_size().columns))
    return textwrap.fill(
        printable(text), width, initial_indent=indent, subsequent_indent=indent, break_on_hyphens=False
    )


@contextlib.contextmanager
def ended_by_signals() -> Iterator[None]:
    """The first of the signals that end a program ends what is inside, by an exception; further ones are
    ignored, so that none keeps it from ending its pulses."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.getsignal(number) for number in ENDING}

    def end(number: int, _: object) -> NoReturn:
        for each in ENDING:
            signal.signal(each, signal.SIG_IGN)
        if number == signal.SIGINT:
            raise KeyboardInterrupt
        raise SystemExit(128 + number)

    for number in ENDING:
        signal.signal(number, end)
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
