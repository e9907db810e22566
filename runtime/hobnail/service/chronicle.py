"""Who asked the robot for what, as lines for the log; m/s, deg/s, m and s.

A commander repeats its walk command many times a second: told are the first of
a stream, a change now and then, and its end.  Bounded whatever clients send.
Pure: time is an argument, and the lines go to a function.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

from hobnail.errors import HobnailError
from hobnail.service.faults import Thinner

Tell = Callable[[str, float, int], object]  # text, now_s, client

READING = frozenset({"state", "describe", "watch"})
CHANGE_EVERY_S = 10.0  # of a walk command that goes on; the last minute has every tick of it
BURST, LINES_A_S = 20.0, 1.0  # so many lines at once, and so many more a second


class Chronicle:
    """Turns requests into lines; `tell` takes each, with its time and who asked."""

    def __init__(self, tell: Tell, *, ttl_s: float) -> None:
        """`ttl_s` is the life of a walk command that does not say its own."""
        self._tell = tell
        self._ttl_s = ttl_s
        self._thinner = Thinner()
        self._stream: tuple[int, float] | None = None  # who walks the robot, and until when
        self._twist = (0.0, 0.0, 0.0)  # as last told
        self._told_s = -math.inf
        # Stops have room of their own, so that no other request can keep one out of the log.
        self._room = {"stop": BURST, "": BURST}
        self._filled_s = dict.fromkeys(self._room, -math.inf)
        self._left_out = 0

    def taken(self, method: str, params: Mapping[str, object], client: int, now_s: float) -> None:
        """A request was carried out."""
        if method in READING:
            return
        if method == "walk":
            self._walk(params, client, now_s)
            return
        self._stream = None
        self._line(method, _words(method, params), now_s, client)

    def refused(self, method: str, error: HobnailError, client: int, now_s: float) -> None:
        """A request was not carried out."""
        if method not in READING:
            why = str(error).removeprefix(f"{method}: ")
            line = self._thinner.line(f"{method} {error.cause}", f"refused {method}: {why}", now_s)
            if line is not None:
                self._line("", line, now_s, client)

    def _walk(self, params: Mapping[str, object], client: int, now_s: float) -> None:
        twist = (_number(params, "vx"), _number(params, "vy"), _number(params, "yaw_rate"))
        going = self._stream is not None and self._stream[0] == client and now_s <= self._stream[1]
        if not any(twist):
            self._stream = None
            if going:
                self._line("", "walk ends, all velocities are zero", now_s, client)
            return
        self._stream = (client, now_s + _number(params, "ttl_s", self._ttl_s))
        if not going or (twist != self._twist and now_s - self._told_s >= CHANGE_EVERY_S):
            self._twist, self._told_s = twist, now_s
            self._line("", f"walk{' changes to' if going else ''} {_twist_words(params)}", now_s, client)

    def _line(self, method: str, text: str, now_s: float, client: int) -> None:
        kind = method if method in self._room else ""
        grown = (now_s - self._filled_s[kind]) * LINES_A_S
        self._room[kind] = min(BURST, self._room[kind] + grown)
        self._filled_s[kind] = now_s
        if self._room[kind] < 1.0:
            self._left_out += 1
            return
        self._room[kind] -= 1.0
        if self._left_out:
            text, self._left_out = f"{text} (before it, {self._left_out} requests more than are told)", 0
        self._tell(text, now_s, client)


def _words(method: str, params: Mapping[str, object]) -> str:
    match method:
        case "stop":
            reason = params.get("reason")
            return f"stop, category {params.get('category', 1)}" + (f": {reason}" if reason else "")
        case "gait":
            return f"gait {params.get('name')}"
        case "route":
            steps = params.get("steps")
            return f"route of {len(steps)} steps" if isinstance(steps, list) else "route cancelled"
        case "posture":
            return "posture " + ", ".join(f"{name} {_short(value)}" for name, value in params.items())
        case _:
            return method


def _short(value: object) -> str:
    if isinstance(value, tuple):
        return " ".join(map(_short, value))
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def _twist_words(params: Mapping[str, object]) -> str:
    turn = math.degrees(_number(params, "yaw_rate"))
    words = (
        f"{_number(params, 'vx'):+.3f} m/s ahead, {_number(params, 'vy'):+.3f} m/s left, {turn:+.1f} deg/s"
    )
    pivot = params.get("pivot")
    if isinstance(pivot, tuple) and any(pivot):
        words += f" about {_short(pivot)} m"
    return words


def _number(params: Mapping[str, object], name: str, default: float = 0.0) -> float:
    value = params.get(name)
    return float(value) if isinstance(value, (int, float)) else default
