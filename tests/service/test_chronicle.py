"""Requests as lines of the log: who, what, thinned, and bounded whatever clients send."""

from __future__ import annotations

from hobnail.errors import CommanderError, StoppedError
from hobnail.service.chronicle import BURST, CHANGE_EVERY_S, Chronicle


class Book:
    """A chronicle and the lines that it gave: (text, client)."""

    def __init__(self) -> None:
        self.lines: list[tuple[str, int]] = []
        self.chronicle = Chronicle(lambda text, _now_s, client: self.lines.append((text, client)), ttl_s=0.5)

    @property
    def texts(self) -> list[str]:
        return [text for text, _ in self.lines]

    def walk(self, now_s: float, vx: float = 0.1, client: int = 1, **params: object) -> None:
        self.chronicle.taken(
            "walk", {"vx": vx, "vy": 0.0, "yaw_rate": 0.0, "pivot": (0.0, 0.0), **params}, client, now_s
        )


def test_each_request_that_changes_something_is_a_line_and_reading_is_none() -> None:
    book = Book()
    for method, params in (
        ("stand", {}),
        ("gait", {"name": "crawl"}),
        ("posture", {"height_m": 0.1, "lean_m": (0.01, -0.02)}),
        ("route", {"steps": [{}, {}]}),
        ("route", {"cancel": True}),
        ("stop", {"category": 0, "reason": "smoke"}),
        ("stop", {"category": 1, "reason": ""}),
        ("reset", {}),
        ("state", {}),
        ("describe", {}),
    ):
        book.chronicle.taken(method, params, 7, 1.0)
    assert book.texts == [
        "stand",
        "gait crawl",
        "posture height_m 0.1, lean_m 0.01 -0.02",
        "route of 2 steps",
        "route cancelled",
        "stop, category 0: smoke",
        "stop, category 1",
        "reset",
    ]
    assert {client for _, client in book.lines} == {7}


def test_a_walk_that_is_renewed_is_told_once_and_its_end_too() -> None:
    book = Book()
    for step in range(100):
        book.walk(0.02 * step)
    book.walk(2.0, vx=0.0)
    book.walk(2.1, vx=0.0)
    assert book.texts == [
        "walk +0.100 m/s ahead, +0.000 m/s left, +0.0 deg/s",
        "walk ends, all velocities are zero",
    ]


def test_a_walk_is_told_again_after_a_pause_and_from_another_client() -> None:
    book = Book()
    book.walk(0.0)
    book.walk(0.6)  # beyond its time-to-live
    book.walk(0.7, client=2)
    book.walk(1.6, client=2, ttl_s=2.0)
    book.walk(3.5, client=2)
    assert [client for _, client in book.lines] == [1, 1, 2, 2]


def test_a_changing_walk_is_told_now_and_then() -> None:
    book = Book()
    for step in range(1000):
        book.walk(0.1 * step, vx=0.1 + 0.0001 * step, pivot=(0.1, 0.0))
    assert len(book.lines) == 100.0 // CHANGE_EVERY_S
    assert book.texts[1] == "walk changes to +0.110 m/s ahead, +0.000 m/s left, +0.0 deg/s about 0.1 0 m"


def test_refusals_are_thinned() -> None:
    book = Book()
    for _ in range(1000):
        book.chronicle.refused("walk", StoppedError("walk: stopped: smoke"), 3, 1.0)
        book.chronicle.refused("state", StoppedError("never told"), 3, 1.0)
    book.chronicle.refused("walk", CommanderError("client 1 commands the robot"), 3, 1.0)
    assert book.texts == [
        "refused walk: stopped: smoke",
        "refused walk: stopped: smoke (repeated 10 times)",
        "refused walk: stopped: smoke (repeated 100 times)",
        "refused walk: stopped: smoke (repeated 1000 times)",
        "refused walk: client 1 commands the robot",
    ]


def test_a_flood_is_bounded_and_what_is_left_out_is_counted() -> None:
    book = Book()
    for _ in range(10_000):
        book.chronicle.taken("stand", {}, 1, 5.0)
    assert len(book.lines) == BURST
    book.chronicle.taken("gait", {"name": "crawl"}, 1, 6.5)
    left_out = 10_000 - int(BURST)
    assert book.texts[-1] == f"gait crawl (before it, {left_out} requests more than are told)"


def test_no_flood_keeps_a_stop_out_of_the_log() -> None:
    book = Book()
    for _ in range(1000):
        book.chronicle.taken("stand", {}, 1, 5.0)
    book.chronicle.taken("stop", {"category": 0, "reason": "smoke"}, 2, 5.0)
    assert book.texts[-1].startswith("stop, category 0: smoke")
