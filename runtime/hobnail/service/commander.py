"""Who may command the robot: one client at a time, by a claim that lapses; times in s, monotonic.

Pure: knows client numbers, not connections.  `stop`, `reset` and reading need no claim.
"""

from __future__ import annotations

import math

from hobnail.errors import CommanderError


class Commander:
    """The claim to command.  A client takes it by its first request and keeps it by the next ones."""

    def __init__(self) -> None:
        self._client_id: int | None = None
        self._until_s = -math.inf

    def holder(self, now_s: float) -> int | None:
        """The client that holds the claim, None when it is free."""
        return self._client_id if now_s < self._until_s else None

    def take(self, client_id: int, now_s: float, ttl_s: float) -> None:
        """Take or keep the claim for `ttl_s` more; math.inf keeps it until it is dropped.

        Raises CommanderError when another client holds it.
        """
        holder = self.holder(now_s)
        if holder is not None and holder != client_id:
            left_s = self._until_s - now_s
            lapse = "while its route runs" if math.isinf(left_s) else f"for {left_s:.2f} s more"
            raise CommanderError(
                f"client {holder} commands the robot {lapse}: wait until its claim lapses, "
                "or ask it to let go; `stop` is open to all"
            )
        self._client_id, self._until_s = client_id, now_s + ttl_s

    def drop(self, client_id: int | None = None) -> None:
        """Free the claim: of that client only, or whoever holds it."""
        if client_id is None or client_id == self._client_id:
            self._client_id, self._until_s = None, -math.inf
