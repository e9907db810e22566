"""Lines and credit of one client, without sockets: whatever the pieces, the same lines; always bounded."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from hobnail.service.connection import CHUNK, Connection, Limits

_SMALL = Limits(max_line=20, max_discard=60, rate_hz=10.0, burst=5.0)
_TEXTS = st.lists(
    st.binary(max_size=8) | st.sampled_from([b"\n", b"\n\n", b"x" * 25, b'"stop"']), max_size=30
).map(b"".join)


def _lines(connection: Connection) -> list[bytes | None]:
    lines = []
    while connection.has_line():
        lines.append(connection.take_line())
    return lines


def _expected(text: bytes, limit: int) -> list[bytes | None]:
    """What `bytes.split` makes of it; a line beyond the limit is None."""
    lines = text.split(b"\n")
    if not lines[-1]:
        lines.pop()
    return [line if len(line) <= limit else None for line in lines]


@given(_TEXTS, st.lists(st.integers(1, 12), max_size=60), st.booleans())
def test_lines_do_not_depend_on_the_pieces_they_come_in(text: bytes, cuts: list[int], eager: bool) -> None:
    connection = Connection(_SMALL, 0.0)
    found: list[bytes | None] = []
    rest = text
    for cut in [*cuts, *[12] * (len(text) // 12 + 1)]:
        if not rest:
            break
        if not connection.has_room():
            found += _lines(connection)
        connection.feed(rest[:cut])
        rest = rest[cut:]
        if eager:
            found += _lines(connection)
        assert len(connection.inbox) <= _SMALL.max_line + 12
    assert not rest
    connection.feed(b"")
    assert found + _lines(connection) == _expected(text, _SMALL.max_line)
    assert connection.ended
    assert not connection.inbox


def test_credit_is_spent_and_comes_back_with_time() -> None:
    connection = Connection(_SMALL, 0.0)
    connection.feed(b"\n" * 20)
    taken = 0
    while connection.is_ready(0.0):
        connection.take_line()
        taken += 1
    assert taken == 5
    assert connection.is_flooding
    assert abs(connection.waits_s(0.0) - 0.0001) < 1e-12  # it has just none; the next instant it has some
    assert connection.is_ready(0.0002)
    connection.take_line()
    assert not connection.is_ready(0.05)
    assert connection.is_ready(0.05 + connection.waits_s(0.05))
    connection.take_line()
    assert not connection.floods_too_long(0.49)
    assert connection.floods_too_long(0.5)


def test_time_that_stands_still_or_runs_back_gives_no_credit() -> None:
    connection = Connection(_SMALL, 100.0)
    connection.feed(b"\n" * 20)
    for _ in range(5):
        assert connection.is_ready(100.0)
        connection.take_line()
    assert not connection.is_ready(50.0)
    assert not connection.is_ready(50.0)


def test_a_backlog_worked_off_is_no_flood_any_more() -> None:
    connection = Connection(_SMALL, 0.0)
    connection.feed(b"\n" * 7)
    now_s = 0.0
    while connection.has_line():
        if connection.is_ready(now_s):
            connection.take_line()
        now_s += 0.01
    assert not connection.is_ready(now_s)
    assert not connection.is_flooding
    assert not connection.floods_too_long(1e9)


def test_one_line_that_waits_is_no_flood_but_two_are() -> None:
    connection = Connection(_SMALL, 0.0)
    connection.spend(10.0)
    connection.feed(b"a\n")
    assert not connection.is_ready(0.0)
    assert not connection.is_flooding
    connection.feed(b"b\n")
    assert not connection.is_ready(0.0)
    assert connection.is_flooding


def test_lines_up_to_a_stop_need_no_credit() -> None:
    connection = Connection(_SMALL, 0.0)
    connection.spend(100.0)
    connection.feed(b"a\nb\n")
    assert not connection.is_ready(0.0)
    connection.feed(b'c\n {"st')
    connection.feed(b'opped"}\nd\ne\n')  # not the word itself
    assert not connection.is_ready(0.0)
    connection.feed(b'"st')
    connection.feed(b'op"\nf\n')
    given_out = []
    while connection.is_ready(0.0):
        given_out.append(connection.take_line())
    assert given_out == [b"a", b"b", b"c", b' {"stopped"}', b"d", b"e", b'"stop"']
    assert connection.inbox == b"f\n"


def test_what_is_thrown_away_is_counted_a_line_at_a_time() -> None:
    connection = Connection(_SMALL, 0.0)
    connection.feed(b"x" * 30)
    assert _lines(connection) == [None]
    connection.feed(b"x" * 40)
    assert connection.discarded == 70
    connection.feed(b"x\nab\n")
    assert connection.discarded == 0
    assert _lines(connection) == [b"ab"]


def test_after_its_end_nothing_is_left() -> None:
    connection = Connection(_SMALL, 0.0)
    connection.feed(b'a\n"stop"\nb')
    assert connection.has_line()
    connection.end()
    assert not connection.has_line()
    assert not connection.has_room()
    assert not connection.is_ready(1e9)


def test_room_is_for_one_chunk_beyond_a_line() -> None:
    limits = Limits()
    connection = Connection(limits, 0.0)
    while connection.has_room():
        connection.feed(b"\n" * CHUNK)
    assert limits.max_line < len(connection.inbox) <= limits.max_line + CHUNK
