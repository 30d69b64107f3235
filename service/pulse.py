"""How late the event loop is, since a request waits that long before anybody sees it arrive."""

from __future__ import annotations

import asyncio
import time

BEAT_S = 0.01


class Pulse:
    """A beat that is late when the loop is; run() must go beside what it measures."""

    def __init__(self) -> None:
        # Before the first beat nothing can be late.
        self._due = float("inf")
        self._late_s = self._worst_s = 0.0

    def lag_s(self) -> float:
        """Seconds by which the loop is late, or was at its last beat a moment ago."""
        return max(self._late_s, time.monotonic() - self._due, 0.0)

    def worst_s(self) -> float:
        """Seconds by which the loop was late at worst since this was last asked."""
        worst_s, self._worst_s = max(self._worst_s, self.lag_s()), 0.0
        return worst_s

    async def run(self) -> None:
        """Beat until cancelled."""
        while True:
            # Set before the sleep: after a stall a request may be seen before the late beat is.
            self._due = time.monotonic() + BEAT_S
            await asyncio.sleep(BEAT_S)
            self._late_s = time.monotonic() - self._due
            self._worst_s = max(self._worst_s, self._late_s)
