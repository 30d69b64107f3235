"""Decisions that wait to be logged, apart from who makes and who writes them.

The log may lose rows under overload, and counts them; a hold is never lost with it.
"""

from __future__ import annotations

from collections import deque

from service.store.decisions import Decision


class Backlog:
    """
    A bounded queue between the bidder and the log.

    Args:
        count_max: Decisions kept; beyond it new ones are dropped and counted.
    """

    def __init__(self, count_max: int) -> None:
        self._waiting: deque[Decision] = deque()
        self._count_max = count_max
        self.dropped = 0

    def __len__(self) -> int:
        return len(self._waiting)

    def add(self, decision: Decision) -> None:
        """Queue one decision, unless there is no room."""
        if len(self._waiting) >= self._count_max:
            self.dropped += 1
            return
        self._waiting.append(decision)

    def drain(self, count_max: int) -> list[Decision]:
        """Take the oldest decisions out, for the log."""
        count = min(count_max, len(self._waiting))
        return [self._waiting.popleft() for _ in range(count)]

    def put_back(self, decisions: list[Decision]) -> None:
        """Return decisions that could not be written, the newest of them if room is short."""
        room = max(0, self._count_max - len(self._waiting))
        # Without the condition a room of 0 would keep them all.
        kept = decisions[-room:] if room else []
        self.dropped += len(decisions) - len(kept)
        # In front of what came meanwhile, so that the log stays in the order of the bids.
        self._waiting.extendleft(reversed(kept))
