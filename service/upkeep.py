"""The third story, in the background: time, changes, money to give back, lessons, the log.

Each duty is a loop of its own; a database that is away makes it wait, a damaged line item
is frozen, anything else ends the worker, since it is better to stop than to go on in an
unknown state.
"""

from __future__ import annotations

import asyncio
import logging
from collections.abc import Awaitable, Callable, Coroutine
from dataclasses import dataclass
from functools import partial
from typing import Any

from service.backlog import Backlog
from service.catalog import Catalog, Item
from service.errors import BrokenPromise, StoreAway
from service.learner.exptree_state import UnreadableTree
from service.learner.memory import UnreadableMemory
from service.leasing import Leasing
from service.store import audit, clock, decisions, epochs, learners, leases, workers
from service.store.database import Database, Writing
from service.teaching import FRESH, lawful, lesson, readable
from service.threads import Threads

logger = logging.getLogger(__name__)

DECISIONS_MAX = 2000
GIVE_BACK_S = 0.2
LOG_S = 0.5
CLOCK_S = 1.0
AWAY_S = 0.5
AUDIT_S = 10.0
PRUNE_S = 3600.0
DAY_MS = 86_400_000


@dataclass(frozen=True, slots=True)
class Rhythm:
    """How often each duty is done; see the settings for the reasons."""

    change_poll_ms: int
    tick_s: int
    teach_ms: int
    clock_step_ms_max: int
    checkpoint_entries: int
    decision_keep_days: int


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
    ) -> None:
        self._database, self._threads, self._worker = database, threads, worker
        self._catalog, self._leasing, self._backlog = catalog, leasing, backlog
        self._news, self._rhythm = news, rhythm

    def duties(self) -> list[Coroutine[Any, Any, None]]:
        """Every loop, to be run until cancelled."""
        rhythm = self._rhythm
        return [
            self._every(CLOCK_S, self.keep_time),
            self._follow_changes(),
            self._every(GIVE_BACK_S, self.give_back),
            self._every(rhythm.tick_s, self._leasing.tick),
            self._every(rhythm.teach_ms / 1000, self.teach),
            self._every(LOG_S, self.log),
            self._every(AUDIT_S, self.audit),
            self._every(PRUNE_S, self.prune),
        ]

    async def start(self) -> None:
        """Begin reading changes, move time on once, say that this worker lives, mend states."""
        await self._catalog.start()
        await self._sparing(self.keep_time)
        await self._read_again()

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
        """Move service time on, beat, and close what is over."""

        def work(connection: Writing) -> None:
            wall = clock.wall_clock(connection, self._database)
            clock.advance(connection, wall, self._rhythm.clock_step_ms_max)
            workers.beat(connection, self._worker, self._catalog.change_seen, wall)

        await self._threads.run(self._database.write, work)
        await self._threads.run(leases.close_due, self._database)

    async def follow(self) -> None:
        """Apply what changed, and say how far this worker is."""
        before = self._catalog.change_seen
        for item in await self._catalog.follow():
            self._apply(item)
        if self._catalog.change_seen != before:
            await self._threads.run(self._database.write, self._beat)

    async def give_back(self) -> None:
        """Retire slices whose time is over and free what they never issued."""
        self._leasing.hand.retire_expired(self._leasing.clock())
        await self._leasing.give_back()

    async def teach(self) -> None:
        """Fold what is new, line item by line item."""
        for name in await self._threads.run(self._database.read, learners.behind):
            while await self._teach(name) == learners.ENTRIES_MAX:
                pass

    async def log(self) -> None:
        """Write queued decisions."""
        while rows := self._backlog.drain(DECISIONS_MAX):
            try:
                await self._threads.run(decisions.log, self._database, rows)
            except StoreAway:
                self._backlog.put_back(rows)
                return

    async def audit(self) -> None:
        """Freeze what no longer says what was promised; the command reads the streams too."""
        await self._freeze_broken()

    async def prune(self) -> None:
        """Forget old decisions."""
        before_ms = self._database.wall_ms() - self._rhythm.decision_keep_days * DAY_MS
        await self._threads.run(
            self._database.write, lambda connection: decisions.prune(connection, before_ms)
        )
        await self._threads.run(self._database.write, epochs.prune)

    async def _teach(self, line_item: str) -> int:
        every = self._rhythm.checkpoint_entries
        try:
            return await self._threads.run(
                learners.teach, self._database, line_item, lesson, every, lawful
            )
        except (UnreadableMemory, UnreadableTree):
            # Of another release, or damaged; the stream has all that it was made from.
            logger.exception("a learner's state cannot be read; its stream is read again")
            await self._refold(line_item)
            return learners.ENTRIES_MAX

    async def _refold(self, line_item: str) -> None:
        work = self._database.write
        await self._threads.run(work, lambda c: learners.refold(c, line_item, FRESH))

    async def _read_again(self) -> None:
        """Refold what another release has written; where nobody can bid, no new entry would."""
        after: str | None = ""
        while after is not None:
            look = partial(learners.unreadable, after=after, readable=readable)
            bad, after = await self._threads.run(self._database.read, look)
            for line_item in bad:
                logger.warning("the state of %s is of another release; it is made anew", line_item)
                await self._refold(line_item)

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
            await self._unless_away(self.follow)
            try:
                async with asyncio.timeout(self._rhythm.change_poll_ms / 1000):
                    await self._news.wait()
            except TimeoutError:
                continue
            self._news.clear()

    async def _every(self, seconds: float, duty: Callable[[], Awaitable[None]]) -> None:
        while True:
            await asyncio.sleep(seconds)
            await self._unless_away(duty)

    async def _freeze_broken(self) -> list[str]:
        frozen = await self._threads.run(audit.freeze_broken, self._database)
        for name in frozen:
            logger.critical("a promise of line item %s is broken; it is frozen", name)
        return frozen

    async def _sparing(self, duty: Callable[[], Awaitable[None]]) -> None:
        """Do a duty; one damaged line item in its way is frozen, and must not stop the others."""
        try:
            await duty()
        except BrokenPromise:
            if not await self._freeze_broken():
                raise

    async def _unless_away(self, duty: Callable[[], Awaitable[None]]) -> None:
        try:
            await self._sparing(duty)
        except StoreAway:
            logger.warning("the database is away; trying again")
            await asyncio.sleep(AWAY_S)
