"""Questions and answers: lines as they are typed, however long or odd; signals that end what is inside."""

from __future__ import annotations

import io
import os
import signal
import sys

import pytest

from hobnail.cli.dialogue import ENDING, Dialogue, ended_by_signals, wrapped
from hobnail.errors import InputEndedError
from hobnail.workshop.calibrate.effects import Ask


def dialogue(data: bytes, monkeypatch: pytest.MonkeyPatch) -> Dialogue:
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(data)))
    return Dialogue()


def test_answers_are_lines_shown_after_their_questions(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    talk = dialogue(b"  yes \nno", monkeypatch)
    assert talk.ask(Ask("a", "Ready?", ("yes", "no"))) == "yes"
    assert talk.ask(Ask("b", "  Sure?")) == "no"
    with pytest.raises(InputEndedError, match="what was kept stays kept"):
        talk.ask(Ask("c", "More?"))
    assert capsys.readouterr().out == "Ready? [yes/no] yes\n  Sure? no\nMore? \n"


def test_odd_answers_are_answers(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    talk = dialogue(b"\xff\xfe\x1b[31m\n" + b"x" * 50_000 + b"\nok\n\n", monkeypatch)
    talk.ask(Ask("a", "?"))
    assert len(talk.ask(Ask("b", "?"))) == 1000
    assert talk.ask(Ask("c", "?")) == "ok"  # the rest of the long line is no answer
    assert talk.ask(Ask("d", "?")) == ""
    assert "\x1b" not in capsys.readouterr().out


def test_long_lines_are_wrapped_and_keep_their_indent(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "60")
    lines = wrapped(f"    {'word ' * 40}end").split("\n")
    assert len(lines) > 2
    assert all(line.startswith("    word") and len(line) <= 60 for line in lines)
    assert wrapped("") == ""
    assert wrapped("  a\x07b") == "  a?b"


@pytest.mark.parametrize(
    ("number", "end"),
    [
        (signal.SIGINT, KeyboardInterrupt),
        (signal.SIGTERM, SystemExit),
        (signal.SIGHUP, SystemExit),
        (signal.SIGQUIT, SystemExit),
    ],
)
def test_the_first_signal_ends_it_and_the_next_do_not_disturb(
    number: signal.Signals, end: type[BaseException]
) -> None:
    before = [signal.getsignal(each) for each in ENDING]
    cleaned_up: list[str] = []

    def disturbed() -> None:
        with ended_by_signals():
            try:
                os.kill(os.getpid(), number)
            finally:
                for each in ENDING:
                    os.kill(os.getpid(), each)
                cleaned_up.append("yes")

    with pytest.raises(end) as caught:
        disturbed()
    if end is SystemExit:
        assert caught.value.args == (128 + number,)
    assert cleaned_up == ["yes"]
    assert [signal.getsignal(each) for each in ENDING] == before
