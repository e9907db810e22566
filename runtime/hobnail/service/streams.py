"""Which clients hold a walk command down through a stop: theirs is not a fresh command; s, monotonic.

Pure.  A client that goes on sending moving commands with no pause longer than
their time-to-live is one stream; a stream that ran into a stop stays refused
until it lets go.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(slots=True)
class _Stream:
    last_s: float
    ttl_s: float
    held: bool


class Streams:
    """The walk streams of all clients."""

    def __init__(self) -> None:
        self._streams: dict[int, _Stream] = {}

    def note(self, client_id: int, now_s: float, ttl_s: float, *, moves: bool, asleep: bool) -> bool:
        """A walk request came in; True when it may count as fresh.

        `asleep` True: the robot is stopped or off, so the stream began before the next wake.
        """
        if not moves:
            self.let_go(client_id)
            return True
        stream = self._streams.get(client_id)
        if stream is None or now_s - stream.last_s > stream.ttl_s:
            stream = self._streams[client_id] = _Stream(now_s, ttl_s, asleep)
        stream.last_s, stream.ttl_s, stream.held = now_s, ttl_s, stream.held or asleep
        return not stream.held

    def hold_all(self, now_s: float) -> None:
        """A stop: every stream that runs now began before it."""
        for stream in self._streams.values():
            stream.held = now_s - stream.last_s <= stream.ttl_s

    def let_go(self, client_id: int) -> None:
        """That client sent zero or `stand`, or is gone."""
        self._streams.pop(client_id, None)
