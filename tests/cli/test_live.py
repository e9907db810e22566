"""The live view of `run` and its summary: on a terminal, in a pipe, and when the view breaks."""

from __future__ import annotations

import io
import os
import signal
import sys
from collections.abc import Iterator
from typing import Any

import pytest

from hobnail.cli import live, watch
from hobnail.cli.live import Display, Summary
from hobnail.cli.screen import Screen, is_live, speaks_unicode, wants_color
from hobnail.cli.view import View
from robots import juniper
from snapshots import fault, snapshot


class Terminal(io.StringIO):
    """A terminal that keeps what was written."""

    encoding = "utf-8"

    def isatty(self) -> bool:
        return True


def on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> Terminal:
    """Make stdout a terminal of 80 by 24.  No fixture: pytest puts its own stdout back after those."""
    out = Terminal()
    monkeypatch.setattr(sys, "stdout", out)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    monkeypatch.setenv("COLUMNS", "80")
    monkeypatch.setenv("LINES", "24")
    return out


def moving(now_s: float, **changes: Any) -> dict[str, Any]:
    velocity = {"vx_m_s": 0.3, "vy_m_s": 0.4, "yaw_rate_rad_s": -0.2}
    return snapshot(now_s=now_s, velocity=velocity, **changes)


def test_the_summary_adds_up_path_turn_and_faults() -> None:
    summary = Summary()
    still = {"vx_m_s": 0.0, "vy_m_s": 0.0, "yaw_rate_rad_s": 0.0}
    summary.add(snapshot(now_s=0.0, velocity=still))
    summary.add(moving(1.0, faults=[fault(count=3)]))  # from 0 to 0.5 m/s: 0.25 m
    summary.add(moving(3.0, faults=[fault(count=2), fault("tick-overrun", "warn")]))  # 1 m
    assert summary.distance_m == pytest.approx(1.25)
    assert summary.turned_rad == pytest.approx(0.5)
    assert summary.faults == {"supply-low": 3, "tick-overrun": 1}
    text = "\n".join(summary.lines())
    for words in (
        "about 1.25 m",
        "29 deg",
        "1234 of 10 ms, 2 skipped",
        "supply-low x3, tick-overrun",
        "p99.9",
    ):
        assert words in text
    told = summary.as_json()
    assert told["distance_m"] == 1.25
    assert told["faults"] == summary.faults


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"done": True}, "all 4 steps"),
        ({"done": True, "failure": "step 2 of 4 did not end"}, "step 2 of 4 did not end"),
        ({"done": False}, "ended in step 2 of 4"),
    ],
)
def test_the_summary_tells_how_the_route_ended(changes: dict[str, Any], words: str) -> None:
    route = {"step": 2, "steps": 4, "description": "", "failure": "", **changes}
    summary = Summary()
    summary.add(snapshot(route=route, stop={"latched": True, "category": 1, "reason": "smoke\x1b"}))
    text = "\n".join(summary.lines())
    assert words in text
    assert "stopped   smoke?" in text


def test_the_summary_of_nothing_is_still_json() -> None:
    assert Summary().as_json()["distance_m"] == 0.0


def test_a_terminal_gets_the_view_and_is_left_as_it_was(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = on_a_terminal(monkeypatch)
    with Display(juniper()) as display:
        display.show(snapshot())
    text = terminal.getvalue()
    assert text.startswith("\x1b[?1049h")
    assert text.endswith("\x1b[?1049l")
    assert "WALKING" in text
    assert display.summary.last is not None
    assert display.trouble == ""


def test_the_terminal_is_left_as_it_was_after_an_error_too(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = on_a_terminal(monkeypatch)
    with pytest.raises(RuntimeError, match="driver"), Display(juniper()):
        raise RuntimeError("driver")
    assert terminal.getvalue().endswith("\x1b[?1049l")


def test_watching_draws_each_snapshot_and_survives_a_closed_window(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = on_a_terminal(monkeypatch)
    before = signal.getsignal(signal.SIGTERM)

    def snapshots() -> Iterator[dict[str, Any]]:
        yield snapshot()
        yield snapshot(state="standing")
        os.kill(os.getpid(), signal.SIGTERM)
        yield snapshot()

    with pytest.raises(SystemExit) as ended:
        watch._draw(View(), snapshots())
    assert ended.value.code == 143
    assert terminal.getvalue().count("\x1b[H") == 2
    assert terminal.getvalue().endswith("\x1b[?1049l")
    assert signal.getsignal(signal.SIGTERM) is before


def test_log_lines_wait_until_the_screen_is_given_back(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    terminal = on_a_terminal(monkeypatch)
    stderr = Terminal()
    monkeypatch.setattr(sys, "stderr", stderr)
    with Display(juniper()):
        for k in range(1000):
            print(f"line {k}", file=sys.stderr, flush=True)
        assert stderr.getvalue() == ""
    assert sys.stderr is stderr
    lines = stderr.getvalue().splitlines()
    assert lines[-1] == "line 999"
    assert len(lines) == live.LOG_LINES
    assert "line" not in terminal.getvalue()


def test_a_log_that_goes_to_a_file_is_not_held_back(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    terminal = on_a_terminal(monkeypatch)
    stderr = io.StringIO()
    monkeypatch.setattr(sys, "stderr", stderr)
    with Display(juniper()):
        print("line", file=sys.stderr)
        assert stderr.getvalue() == "line\n"
    assert "line" not in terminal.getvalue()


def step(number: int) -> dict[str, Any]:
    """A snapshot in that step of a route."""
    route = {"step": number, "steps": 9, "description": f"part {number}", "done_share": 0.5, "done": False}
    return snapshot(route=route)


def test_a_pipe_gets_a_line_for_each_step_and_nothing_that_the_log_tells_already(
    capsys: pytest.CaptureFixture[str],
) -> None:
    with Display(juniper()) as display:
        for told in (
            snapshot(),
            snapshot(state="standing"),
            step(1),
            step(1),
            step(3),
            snapshot(faults=[fault()]),
        ):
            display.show(told)
    lines = capsys.readouterr().out.splitlines()
    assert [line.split("  ")[-1] for line in lines] == ["route 1/9 50% part 1", "route 3/9 50% part 3"]
    assert not any("\x1b" in line for line in lines)


def test_plain_asks_for_lines_on_a_terminal_too(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = on_a_terminal(monkeypatch)
    with Display(juniper(), plain=True) as display:
        display.show(step(2))
    assert "walking" in terminal.getvalue()
    assert "\x1b" not in terminal.getvalue()


def test_a_view_that_breaks_is_given_up_and_the_sum_goes_on(monkeypatch: pytest.MonkeyPatch) -> None:
    class Closed(io.StringIO):
        def write(self, _text: str) -> int:
            raise BrokenPipeError(32, "Broken pipe")

    monkeypatch.setattr(sys, "stdout", Closed())
    with Display(juniper()) as display:
        display.show({**step(1), "now_s": 0.0})
        display.show(snapshot(now_s=1.0, state="standing"))
    assert "BrokenPipeError" in display.trouble
    assert display.summary.last is not None
    assert display.summary.last["state"] == "standing"


def test_the_screen_is_drawn_over_in_place_and_never_scrolls() -> None:
    out = Terminal()
    Screen(out).show(["one", "two"])
    assert out.getvalue() == "\x1b[Hone\x1b[K\r\ntwo\x1b[K\x1b[J"
    Screen(out).show([])


def test_one_column_is_left_free(monkeypatch: pytest.MonkeyPatch) -> None:
    on_a_terminal(monkeypatch)
    assert Screen().size == (79, 24)


def test_what_is_a_terminal_and_what_gets_colour(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = on_a_terminal(monkeypatch)
    assert is_live()
    assert wants_color()
    assert not wants_color(refused=True)
    monkeypatch.setenv("NO_COLOR", "1")
    assert not wants_color()
    monkeypatch.delenv("NO_COLOR")
    monkeypatch.setenv("TERM", "dumb")
    assert not is_live()
    assert not is_live(io.StringIO())
    assert speaks_unicode(terminal)
    assert not speaks_unicode(io.TextIOWrapper(io.BytesIO(), encoding="ascii"))
