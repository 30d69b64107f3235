"""The clerk: lessons, closing, audit and pruning, which no price waits for.

On PostgreSQL it is a process of its own on each host, so that a long lesson never delays a
price; on SQLite it lives in the threads of the one serving process. Several clerks on one
database do no harm: each piece of work takes its lock or changes nothing the second time.
"""

from __future__ import annotations

import logging
from collections.abc import Coroutine
from dataclasses import dataclass
from functools import partial
from typing import Any

from service.learner.exptree_state import UnreadableTree
from service.learner.memory import UnreadableMemory
from service.patience import Patience
from service.store import decisions, epochs, learners, leases
from service.store.database import Database
from service.teaching import FRESH, lawful, lesson, readable
from service.threads import Threads

logger = logging.getLogger(__name__)

CLOSE_S = 1.0
AUDIT_S = 10.0
PRUNE_S = 3600.0
DAY_MS = 86_400_000


@dataclass(frozen=True, slots=True)
class Habits:
    """How often the clerk teaches and how long what may be forgotten is kept; see the settings."""

    teach_ms: int
    checkpoint_entries: int
    decision_keep_days: int


class Clerk:
    """The duties of one clerk."""

    def __init__(self, database: Database, threads: Threads, habits: Habits) -> None:
        self._database, self._threads, self._habits = database, threads, habits
        self._patience = Patience(database, threads)

    def duties(self) -> list[Coroutine[Any, Any, None]]:
        """Every loop, to be run until cancelled."""
        every = self._patience.every
        return [
            every(self._habits.teach_ms / 1000, self.teach),
            every(CLOSE_S, self.close),
            every(AUDIT_S, self.audit),
            every(PRUNE_S, self.prune),
        ]

    async def start(self) -> None:
        """Close what became due while nobody was here, and mend states of another release."""
        await self._patience.sparing(self.close)
        await self._read_again()

    async def teach(self) -> None:
        """Fold what is new, line item by line item."""
        for name in await self._threads.run(self._database.read, learners.behind):
            while await self._teach(name) == learners.ENTRIES_MAX:
                pass

    async def close(self) -> None:
        """Close the slices whose grace is over."""
        await self._threads.run(leases.close_due, self._database)

    async def audit(self) -> None:
        """Freeze what no longer says what was promised; the command reads the streams too."""
        await self._patience.freeze_broken()

    async def prune(self) -> None:
        """Forget old decisions."""
        before_ms = self._database.wall_ms() - self._habits.decision_keep_days * DAY_MS
        await self._threads.run(
            self._database.write, lambda connection: decisions.prune(connection, before_ms)
        )
        await self._threads.run(self._database.write, epochs.prune)

    async def _teach(self, line_item: str) -> int:
        every = self._habits.checkpoint_entries
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
