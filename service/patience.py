"""How a background duty is repeated, the same for worker and clerk, and apart from both.

A database that is away makes a duty wait, a damaged line item is frozen, anything else ends
the process, since it is better to stop than to go on in an unknown state.
"""

from __future__ import annotations

import asyncio
import logging
import time
from collections.abc import Awaitable, Callable

from service.errors import BrokenPromise, StoreAway
from service.metrics.series import OTHER
from service.metrics.tally import Tally
from service.store import audit
from service.store.database import Database
from service.threads import Threads

logger = logging.getLogger(__name__)

AWAY_S = 0.5


class Patience:
    """Repeats duties on one database."""

    def __init__(self, database: Database, threads: Threads, tally: Tally | None = None) -> None:
        self._database, self._threads = database, threads
        self._tally = tally or Tally()

    async def every(self, seconds: float, duty: Callable[[], Awaitable[None]]) -> None:
        """Do a duty again and again, with so much time in between, until cancelled."""
        while True:
            await asyncio.sleep(seconds)
            await self.unless_away(duty)

    async def unless_away(self, duty: Callable[[], Awaitable[None]]) -> None:
        """Do a duty once; while the database is away, wait a moment instead."""
        try:
            await self.sparing(duty)
            self._done(duty)
        except StoreAway:
            logger.warning("the database is away; trying again")
            await asyncio.sleep(AWAY_S)

    async def sparing(self, duty: Callable[[], Awaitable[None]]) -> None:
        """Do a duty; one damaged line item in its way is frozen, and must not stop the others."""
        try:
            await duty()
        except BrokenPromise:
            # One that no standing check can see is a fault of ours, and not of one line item.
            if not await self.freeze_broken():
                raise

    def _done(self, duty: Callable[[], Awaitable[None]]) -> None:
        name = getattr(duty, "__name__", OTHER)
        now_ms = time.time_ns() // 1_000_000
        self._tally.set("duty_success_timestamp_seconds", name, value=now_ms)

    async def freeze_broken(self) -> list[str]:
        """Freeze the line items whose standing promises are broken; returns those new to it."""
        frozen = await self._threads.run(audit.freeze_broken, self._database)
        for name in frozen:
            logger.critical("a promise of line item %s is broken; it is frozen", name)
        return frozen
