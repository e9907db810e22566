"""What a snapshot looks like: what must be there, what fits, and nothing that steers a terminal."""

from __future__ import annotations

import re
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.cli.view import ASCII, UNICODE, View, bar, duration, gauge, one_line, outline, printable
from snapshots import fault, snapshot

LEGS = ("left-front", "right-front", "left-hind", "right-hind")
COLOUR = re.compile(r"\x1b\[[0-9;]*m")


def drawn(told: dict[str, Any], width: int = 80, height: int = 24, **options: Any) -> list[str]:
    return View(LEGS, (0.25, 0.12, 0.9), **{"color": False, **options}).draw(told, width, height)


def route(**changes: Any) -> dict[str, Any]:
    progress = {
        "step": 3,
        "steps": 12,
        "description": "forward 600 mm (bench A)",
        "done_share": 0.4,
        "elapsed_s": 10.0,
        "remaining_s": 14.2,
        "done": False,
        "failure": "",
        "twist": {"vx_m_s": 0.2, "vy_m_s": 0.0, "yaw_rate_rad_s": 0.0},
    }
    return {**progress, **changes}


def test_tells_what_a_passer_by_wants_to_know() -> None:
    text = "\n".join(drawn(snapshot()))
    for words in ("juniper", "WALKING", "gait trot", "no hardware", "commanded by client 1", "no faults"):
        assert words in text
    assert "+0.200" in text  # commanded forward, m/s
    assert "+17.2" in text  # 0.3 rad/s commanded, in degrees
    assert "1234 done, 2 skipped" in text
    assert all(leg in text for leg in LEGS)
    assert "heading" in text


def test_fits_eighty_by_twenty_four_with_route_faults_and_stop() -> None:
    told = snapshot(
        route=route(),
        faults=[fault(), fault("tick-overrun", "warn", count=12)],
        stop={"latched": True, "category": 1, "reason": "fault supply-low"},
        first_cause="supply-low: 5.1 V",
    )
    lines = drawn(told)
    assert len(lines) <= 24
    assert max(map(len, lines)) <= 80
    text = "\n".join(lines)
    assert "REST supply-low, first cause" in text
    assert "WARN tick-overrun x12" in text
    assert "next: charge or change the battery" in text
    assert "stop latched (category 1): fault supply-low" in text
    assert "step 3 of 12" in text


@given(
    width=st.integers(1, 300),
    height=st.integers(1, 60),
    color=st.booleans(),
    count=st.integers(0, 8),
    routed=st.booleans(),
    reason=st.text(max_size=200),
)
def test_fits_any_terminal(
    width: int, height: int, color: bool, count: int, routed: bool, reason: str
) -> None:
    told = snapshot(
        faults=[fault(f"fault-{k}", "cut", message=reason) for k in range(count)],
        route=route(description=reason) if routed else None,
        stop={"latched": bool(count), "category": 0, "reason": reason},
    )
    lines = drawn(told, width, height, color=color)
    assert len(lines) <= height
    plain = [COLOUR.sub("", line) for line in lines]
    assert all(len(line) <= max(width, 40) for line in plain)
    # What clients wrote cannot steer the terminal: only our own colours are left.
    assert all(line.isprintable() for line in plain)
    assert height < 2 or "WALKING" in plain[1]


def test_the_most_important_stays_when_there_is_no_room() -> None:
    told = snapshot(faults=[fault()], route=route())
    text = "\n".join(drawn(told, height=8))
    assert "WALKING" in text
    assert "REST supply-low" in text
    assert "skipped" not in text
    full = "\n".join(drawn(told, height=40))
    assert "skipped" in full


def test_without_colour_there_is_no_escape_and_with_colour_every_one_is_closed() -> None:
    told = snapshot(faults=[fault()])
    assert not any("\x1b" in line for line in drawn(told))
    coloured = drawn(told, color=True)
    assert any("\x1b[" in line for line in coloured)
    for line in coloured:
        codes = COLOUR.findall(line)
        assert len(codes) % 2 == 0
        assert all(code == "\x1b[0m" for code in codes[1::2])
    assert [COLOUR.sub("", line).rstrip() for line in coloured] == drawn(told)


def test_ascii_only_where_unicode_cannot_be_written() -> None:
    told = snapshot(route=route())
    assert all(line.isascii() for line in drawn(told, glyphs=ASCII))
    assert not all(line.isascii() for line in drawn(told, glyphs=UNICODE))


def test_the_gait_diagram_grows_by_a_column_a_snapshot() -> None:
    view = View(LEGS, color=False, glyphs=ASCII)
    for stance in ([True, False, False, True], [False, True, True, False], [True, True, True, True]):
        lines = view.draw(snapshot(stance=stance))
    by_leg = {line.split()[0]: line.split()[1:] for line in lines if line.startswith(("left-", "right-"))}
    assert by_leg["left-front"] == ["down", "#_#"]
    assert by_leg["right-front"] == ["down", "_##"]


def test_a_robot_that_is_off_shows_no_feet() -> None:
    lines = drawn(snapshot(state="off", stance=[], feet_m=[], height_m=None))
    assert not any(line.startswith("left-front") for line in lines)
    assert "height" not in "\n".join(lines)


def test_legs_without_known_names_are_numbered() -> None:
    lines = View(color=False).draw(snapshot(stance=[True] * 6))
    assert sum(line.startswith("leg ") for line in lines) == 6


def test_a_route_commands_by_itself_and_a_done_one_is_not_shown() -> None:
    told = snapshot(route=route(), command={**snapshot()["command"], "vx_m_s": 0.0, "holder": 0})
    text = "\n".join(drawn(told))
    assert "walks its own route" in text
    assert "forward      +0.200" in text
    assert "14.2 s left" in text
    assert "step 3 of 12" not in "\n".join(drawn(snapshot(route=route(done=True))))
    failed = drawn(snapshot(route=route(done=True, failure="step 3 of 12 did not end")))
    assert "step 3 of 12 did not end" in failed


def test_slowing_is_told() -> None:
    assert "slowed to 62%" in "\n".join(drawn(snapshot(slowdown=0.62)))
    assert "slowed to" not in "\n".join(drawn(snapshot(slowdown=1.0)))


@given(st.floats(-3, 3), st.floats(-3, 3), st.integers(3, 60))
def test_a_bar_reaches_from_the_middle_to_its_value(value: float, wanted: float, span: int) -> None:
    text = bar(value, wanted, span, ASCII)
    half = span // 2
    assert len(text) == 2 * half + 1
    assert text.count("|") == 1
    mark = text.index("|") - half
    assert mark == round(max(-1.0, min(1.0, wanted)) * half)
    reach = round(max(-1.0, min(1.0, value)) * half)
    filled = [k - half for k, c in enumerate(text) if c == "#"]
    inside = set(range(min(0, reach), max(0, reach) + 1)) if reach else set()
    assert set(filled) == inside - {mark}


@given(st.floats(-1, 2), st.integers(1, 60))
def test_a_gauge_is_always_as_long(share: float, span: int) -> None:
    text = gauge(share, span, ASCII)
    assert len(text) == span
    assert text.count("#") == round(max(0.0, min(1.0, share)) * span)


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0.04, "0.0 s"), (59.94, "59.9 s"), (60, "1:00 min"), (754, "12:34 min"), (7387, "2:03:07 h")],
)
def test_durations(seconds: float, text: str) -> None:
    assert duration(seconds) == text


def test_one_line_is_one_line_whatever_is_in_it() -> None:
    told = snapshot(
        faults=[fault()],
        route=route(description="forward\n600\x1b[2J"),
        stop={"latched": True, "category": 0, "reason": ""},
    )
    line = one_line(told)
    assert line.isprintable()
    for words in ("walking", "gait trot", "route 3/12 40%", "FAULTS supply-low (rest)", "STOP LATCHED"):
        assert words in line


@given(st.text())
def test_what_is_printed_cannot_steer_the_terminal(text: str) -> None:
    clean = printable(text)
    assert clean.isprintable()
    assert len(clean) == len(text)
    if text.isprintable():
        assert clean == text


def test_what_describe_tells_gives_names_and_limits() -> None:
    described = {
        "legs": list(LEGS),
        "envelope": {"forward_m_s": 0.25, "sideways_m_s": 0.12, "turn_rad_s": 0.9},
    }
    assert outline(described) == (LEGS, (0.25, 0.12, 0.9))
