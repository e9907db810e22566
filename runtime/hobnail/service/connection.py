"""One client's incoming lines, credit and queued answers; in bytes and seconds, no socket, no clock.

Everything here is bounded: what is kept of a line, how many lines a second are
handed out, how long a line beyond the limit is thrown away.
"""

from __future__ import annotations

from dataclasses import dataclass

CHUNK = 16384  # most bytes taken in or given out at once
BYTES_A_CREDIT = 4096  # a line costs one credit, and one more for each of these

_STOP = b'"stop"'


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """What one client may ask for.  A client in debt is slowed to `rate_hz`; one that goes on
    sending more for `flood_s` is to be dropped."""

    max_line: int = 65536  # bytes
    max_queue: int = 262144  # bytes of answers that it has not read
    max_discard: int = 1048576  # bytes of one line beyond `max_line`
    rate_hz: float = 250.0  # requests a second, on average
    burst: float = 125.0  # requests at once
    flood_s: float = 0.5


class Connection:
    """Cuts what comes in into lines, and gives them out no faster than the client's share.

    Lines up to one that names `stop` are given out at once, whatever the debt:
    a stop must not wait behind the flood of its own client.
    """

    def __init__(self, limits: Limits, now_s: float) -> None:
        self.limits = limits
        self.inbox = bytearray()
        self.outbox = bytearray()
        self.ended = False  # nothing more will come in
        self.discarded = 0  # bytes of the present line that were thrown away
        self._discarding = False
        self._line_end = -1  # of the first line in the inbox; -1: not found
        self._searched = 0  # up to here there is no line end
        self._hurry = 0  # bytes of the inbox up to the last line that names `stop`
        self._credit = limits.burst
        self._credited_s = now_s
        self._flood_since_s: float | None = None

    def has_room(self) -> bool:
        """True when one more chunk may be fed."""
        return not self.ended and len(self.inbox) <= self.limits.max_line

    def feed(self, chunk: bytes) -> None:
        """Take in what came, at most CHUNK bytes; an empty chunk is the end of it."""
        if not chunk:
            self.ended = True
            return
        if self._discarding:
            end = chunk.find(b"\n")
            if end < 0:
                self.discarded += len(chunk)
                return
            self._discarding = False
            self.discarded = 0
            chunk = chunk[end + 1 :]
        searched = max(0, len(self.inbox) - len(_STOP) + 1)
        self.inbox += chunk
        stop = self.inbox.rfind(_STOP, searched)
        if stop >= 0:
            self._hurry = stop + 1

    def end(self) -> None:
        """Take no more, and forget what is still to be carried out."""
        self.ended = True
        self.inbox.clear()
        self._line_end = -1
        self._searched = self._hurry = 0

    def has_line(self) -> bool:
        """True when a whole line, or one beyond the limit, is there.  What stands before the
        end of the stream without a line end counts as a line."""
        if self._line_end < 0:
            self._line_end = self.inbox.find(b"\n", self._searched)
            self._searched = len(self.inbox)
        if self._line_end >= 0 or len(self.inbox) > self.limits.max_line:
            return True
        return self.ended and bool(self.inbox)

    def is_ready(self, now_s: float) -> bool:
        """True when a line is there and the client has the credit for it, or is in a hurry."""
        if not self.has_line():
            self._flood_since_s = None
            return False
        elapsed_s = max(0.0, now_s - self._credited_s)
        self._credited_s = now_s
        self._credit = min(self.limits.burst, self._credit + elapsed_s * self.limits.rate_hz)
        if self._credit > 0.0 or self._hurry > 0:
            return True
        if self._flood_since_s is None and self._has_more():
            self._flood_since_s = now_s
        return False

    def _has_more(self) -> bool:
        # One line waiting for its turn is a client that waits for each answer: slowed, no flood.
        return len(self.inbox) > self.limits.max_line or self.inbox.find(b"\n", self._line_end + 1) >= 0

    @property
    def is_flooding(self) -> bool:
        """True from when a client in debt has sent still more, until all of it is worked off."""
        return self._flood_since_s is not None

    def floods_too_long(self, now_s: float) -> bool:
        """True when the client must be dropped; one that has left is not waited for."""
        if self._flood_since_s is None:
            return False
        return self.ended or now_s - self._flood_since_s >= self.limits.flood_s

    def waits_s(self, now_s: float) -> float:
        """How long until a client in debt has credit again; s."""
        return max(0.0, self._credited_s - now_s - self._credit / self.limits.rate_hz) + 0.0001

    def take_line(self) -> bytes | None:
        """The first line without its end; None for one beyond the limit, the rest of which
        will be thrown away.  Only when `has_line`."""
        whole = self._line_end >= 0
        end = self._line_end if whole else len(self.inbox)
        line = bytes(self.inbox[:end]) if end <= self.limits.max_line else None
        taken = end + 1 if whole else end
        self._discarding = line is None and not whole
        if self._discarding:
            self.discarded = end
        del self.inbox[:taken]
        self._hurry = max(0, self._hurry - taken)
        self._line_end = -1
        self._searched = 0
        self.spend(1.0 + end / BYTES_A_CREDIT)
        return line

    def spend(self, credits_due: float) -> None:
        """Charge for work done; the credit may become a debt."""
        self._credit -= credits_due
