"""The third story, in the background of every worker: time, changes, money to give back, the log.

What need not be done beside bids is the clerk's.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import time
from collections.abc import Callable, Coroutine
from dataclasses import dataclass
from typing import Any

from service.backlog import Backlog
from service.catalog import Catalog, Item
from service.errors import StoreAway
from service.leasing import Leasing
from service.metrics.tally import Tally
from service.patience import Patience
from service.store import clock, decisions, workers
from service.store.database import Database, Writing
from service.threads import Threads

logger = logging.getLogger(__name__)

DECISIONS_MAX = 2000
GIVE_BACK_S = 0.2
LOG_S = 0.5
CLOCK_S = 1.0
# A few at a time: what all reported at once was learnt, and became prices, all at once.
TICK_S = 1.0
# The bell is a number in memory, cheap to look at; what it calls for is better done in heaps.
BELL_S = 0.025


@dataclass(frozen=True, slots=True)
class Rhythm:
    """How often each duty is done; see the settings for the reasons."""

    change_poll_ms: int
    tick_s: int
    clock_step_ms_max: int


class Upkeep:
    """The background duties of one worker."""

    def __init__(
        self,
        database: Database,
        threads: Threads,
        worker: str,
        catalog: Catalog,
        leasing: Leasing,
        backlog: Backlog,
        news: asyncio.Event,
        rhythm: Rhythm,
        tally: Tally | None = None,
        bell: Callable[[], int] = int,
    ) -> None:
        self._database, self._threads, self._worker = database, threads, worker
        self._catalog, self._leasing, self._backlog = catalog, leasing, backlog
        self._news, self._rhythm, self._bell = news, rhythm, bell
        self._patience = Patience(database, threads, tally)

    def duties(self) -> list[Coroutine[Any, Any, None]]:
        """Every loop, to be run until cancelled."""
        every = self._patience.every
        return [
            every(CLOCK_S, self.keep_time),
            self._follow_changes(),
            every(GIVE_BACK_S, self.give_back),
            every(TICK_S, self.tick),
            every(LOG_S, self.log),
        ]

    async def start(self, predecessor: str | None = None) -> None:
        """
        Begin reading changes, move time on once and say that this worker lives.

        Args:
            predecessor: A worker that is known to be dead, so that nobody waits for it.
        """
        await self._catalog.start()
        if predecessor is not None:
            await self._threads.run(
                self._database.write, lambda connection: workers.leave(connection, predecessor)
            )
        await self._patience.sparing(self.keep_time)

    async def stop(self) -> None:
        """Give every slice back, write what is left of the log, and leave."""
        # First the hand is emptied, then the database told: a price cannot leave in between.
        self._leasing.hand.retire_all()
        try:
            await self._leasing.give_back()
            await self.log()
            await self._threads.run(
                self._database.write, lambda connection: workers.leave(connection, self._worker)
            )
        except StoreAway:
            logger.warning("the database is away; slices return to their budgets after grace")

    async def keep_time(self) -> None:
        """Move service time on, and beat."""

        def work(connection: Writing) -> None:
            wall = clock.wall_clock(connection, self._database)
            # Only workers move time on: while none of them can take an outcome, no grace passes.
            clock.advance(connection, wall, self._rhythm.clock_step_ms_max)
            workers.beat(connection, self._worker, self._catalog.change_seen, wall)

        await self._threads.run(self._database.write, work)

    async def follow(self) -> None:
        """Apply what changed, and say how far this worker is."""
        renewed, ordered = await self._catalog.follow()
        for item in renewed:
            self._apply(item)
        # Only after all of it is applied, because a freeze waits for this very number. Of a
        # snapshot nobody waits to hear, and the next beat tells of it.
        if ordered:
            await self._threads.run(self._database.write, self._beat)

    async def give_back(self) -> None:
        """Retire slices whose time is over and free what they never issued."""
        self._leasing.hand.retire_expired(self._leasing.clock())
        await self._leasing.give_back()

    async def tick(self) -> None:
        """Report what was priced of some line items, so that each has its turn in time."""
        await self._leasing.tick(parts=max(1, round(self._rhythm.tick_s / TICK_S)))

    async def log(self) -> None:
        """Write queued decisions."""
        full = True
        # What came meanwhile waits for the next turn, or a commit would be made for every few.
        while full and (rows := self._backlog.drain(DECISIONS_MAX)):
            full = len(rows) == DECISIONS_MAX
            try:
                await self._threads.run(decisions.log, self._database, rows)
            except StoreAway:
                self._backlog.put_back(rows)
                return

    def _apply(self, item: Item) -> None:
        """An edit or a freeze takes effect here: the slice leaves the hand at once."""
        self._leasing.forget(item.id)
        if item.limits.frozen:
            self._leasing.hand.retire(item.id)

    def _beat(self, connection: Writing) -> None:
        wall = clock.wall_clock(connection, self._database)
        workers.beat(connection, self._worker, self._catalog.change_seen, wall)

    async def _follow_changes(self) -> None:
        while True:
            heard = self._bell()
            await self._patience.unless_away(self.follow)
            await self._until_news(heard)
            self._news.clear()

    async def _until_news(self, heard: int) -> None:
        """Our own orders wake us at once, the clerk's bell soon; other hosts' wait for the poll."""
        until = time.monotonic() + self._rhythm.change_poll_ms / 1000
        while not self._news.is_set() and self._bell() == heard:
            if (left_s := until - time.monotonic()) <= 0:
                return
            with contextlib.suppress(TimeoutError):
                async with asyncio.timeout(min(BELL_S, left_s)):
                    await self._news.wait()
