"""The clerk: lessons, closing, audit and pruning, which no price waits for.

A process of its own on each host, so that a long lesson never delays a price. Several clerks on
one database do no harm: each piece of work takes its lock or changes nothing the second time.
"""

from __future__ import annotations

import asyncio
import logging
import time
from collections.abc import Callable, Coroutine
from dataclasses import dataclass
from functools import partial
from typing import Any, ParamSpec, TypeVar

from service.learner.exptree_state import UnreadableTree
from service.learner.memory import UnreadableMemory
from service.metrics.board import Board
from service.metrics.tally import Tally
from service.patience import Patience
from service.posting import Posting, Receiver
from service.store import (
    auditing,
    changes,
    charting,
    decisions,
    epochs,
    gauges,
    learners,
    leases,
    outbox,
    refusals,
    rehearsals,
    repeats,
    teachers,
    tripwires,
    workers,
)
from service.store.database import Database, Writing
from service.teaching import FRESH, lawful, lesson, readable
from service.threads import Threads
from service.tripwiring import BUCKET_MS, QUIET_MS, Tending, Widths

logger = logging.getLogger(__name__)

P = ParamSpec("P")
T = TypeVar("T")

CLOSE_S = 1.0
# What somebody has edited by hand is to be found within a minute.
AUDIT_S = 10.0
# Often enough for a scrape every fifteen seconds, which is common practice.
MEASURE_S = 5.0
PRUNE_S = 3600.0
CHART_S = 2.0
TOGETHER = 32  # Line items taught or audited in one transaction.
# Lessons wait for no audit, chart or tripwire: so many times as long as a piece took it rests.
REST = 2.0
DAY_MS = 86_400_000
REFUSAL_KEEP_DAYS = 90  # A quarter: long enough to look back at who tried what.
POST_S = 1.0
HOURS_KEEP_DAYS = 40  # A little longer than tripwires look back.
NEWS_KEEP_DAYS = 30


@dataclass(frozen=True, slots=True)
class Habits:
    """How often the clerk teaches and how long what may be forgotten is kept; see the settings."""

    teach_ms: int
    checkpoint_entries: int
    decision_keep_days: int
    slice_keep_days: int
    quarantine_keep_days: int
    repeat_keep_days: int
    chart_keep_days: int = 400
    tripwire_s: float = 5.0
    tripwire_minute_ms: int = BUCKET_MS
    tripwire_quiet_ms: int = QUIET_MS
    tripwire_keep_days: int = 3
    rehearsal_keep_days: int = 90


class Clerk:
    """The duties of one clerk."""

    def __init__(
        self,
        database: Database,
        threads: Threads,
        habits: Habits,
        receiver: Receiver | None = None,
        board: Board | None = None,
        tally: Tally | None = None,
    ) -> None:
        self._database, self._threads, self._habits = database, threads, habits
        self._board = board or Board.alone()
        self._tally, self._taught_ms = tally or Tally(), 0
        self._patience = Patience(database, threads, self._tally)
        widths = Widths(habits.tripwire_minute_ms)
        self._tending = Tending(database, widths, habits.tripwire_quiet_ms)
        self._posting = Posting(database, threads, receiver or Receiver())
        self._sound: dict[str, auditing.Standing] = {}
        self._others = asyncio.Lock()

    def duties(self) -> list[Coroutine[Any, Any, None]]:
        """Every loop, to be run until cancelled."""
        every = self._patience.every
        return [
            every(self._habits.teach_ms / 1000, self.teach),
            every(CLOSE_S, self.close),
            every(AUDIT_S, self.audit),
            every(PRUNE_S, self.prune),
            every(CHART_S, self.chart),
            every(self._habits.tripwire_s, self.watch),
            every(POST_S, self.tell),
            every(MEASURE_S, self.measure),
        ]

    async def start(self) -> None:
        """Close what became due while nobody was here, and mend states of another release."""
        await self._patience.sparing(self.close)
        await self._read_again()
        # The first scrape finds more than nothing; it can wait if the database is away.
        await self._patience.unless_away(self.measure)

    async def teach(self) -> None:
        """Fold what is new, line item by line item."""
        now_ms = time.monotonic_ns() // 1_000_000
        self._tally.set("teaching_seconds", value=now_ms - (self._taught_ms or now_ms))
        self._taught_ms = now_ms
        behind = await self._threads.run(self._database.read, learners.behind)
        for at in range(0, len(behind), TOGETHER):
            names = behind[at : at + TOGETHER]
            for name in await self._unfinished(names):
                # A full page says that more may wait behind it.
                while await self._teach(name) == teachers.ENTRIES_MAX:
                    pass

    async def close(self) -> None:
        """Close the slices whose grace is over."""
        await self._threads.run(leases.close_due, self._database)

    async def audit(self) -> None:
        """Freeze what no longer says what was promised, from where the last audit ended."""
        # The cheap promises of all come first: the streams behind them may take long.
        await self._patience.freeze_broken()
        # Read before the audit, so that what moves meanwhile still looks new at the next turn.
        stands = await self._threads.run(self._database.read, auditing.standings)
        # Where nothing has moved since it was found sound, not even by hand, it still is.
        moved = [name for name, stand in stands.items() if self._sound.get(name) != stand]
        for at in range(0, len(moved), TOGETHER):
            for piece in await self._audit(moved[at : at + TOGETHER]):
                # The piece was short among many: the rest of a long stream is read alone.
                while not (piece.whole or piece.found):
                    (piece,) = await self._audit([piece.line_item])
                if not piece.found:
                    self._sound[piece.line_item] = stands[piece.line_item]

    async def chart(self) -> None:
        """Count what is new for charts."""
        counted = charting.ENTRIES_MAX
        while counted >= charting.ENTRIES_MAX:
            behind, counted = await self._threads.run(self._database.read, charting.behind), 0
            for at in range(0, len(behind), TOGETHER):
                some = behind[at : at + TOGETHER]
                counted += await self._aside(charting.count, self._database, some)

    async def watch(self) -> None:
        """Look at every line item whose tripwires are due."""
        after = ""
        while page := await self._threads.run(self._tending.due, after):
            for standing in page:
                await self._aside(self._tending.look, standing)
            after = page[-1].line_item

    async def tell(self) -> None:
        """Tell the receiver of news what waits for it."""
        await self._posting.post()

    async def measure(self) -> None:
        """Read what only the database can tell and put it where the metrics are told from."""
        wall_ms = self._database.wall_ms()
        look = partial(gauges.measure, wall_ms=wall_ms)
        self._board.post(await self._threads.run(self._database.read, look))

    async def prune(self) -> None:
        """Forget what has been kept for long enough, in pieces that hold up nobody."""
        habits, wall_ms = self._habits, self._database.wall_ms()
        await self._until_none(decisions.prune, wall_ms - habits.decision_keep_days * DAY_MS)
        await self._until_none(
            decisions.prune_quarantine, wall_ms - habits.quarantine_keep_days * DAY_MS
        )
        await self._until_none(refusals.prune, wall_ms - REFUSAL_KEEP_DAYS * DAY_MS)
        await self._until_none(repeats.prune, wall_ms - habits.repeat_keep_days * DAY_MS)
        await self._until_none(charting.prune, wall_ms - habits.chart_keep_days * DAY_MS)
        await self._threads.run(self._database.write, lambda c: rehearsals.lose(c, wall_ms))
        await self._until_none(rehearsals.prune, wall_ms - habits.rehearsal_keep_days * DAY_MS)
        # A length and not a moment, for slices age by service time and all else by the wall clock.
        await self._until_none(auditing.prune_slices, habits.slice_keep_days * DAY_MS)
        await self._until_none(outbox.prune, wall_ms - NEWS_KEEP_DAYS * DAY_MS)
        for width, days in (
            (tripwires.MINUTES, habits.tripwire_keep_days),
            (tripwires.HOURS, HOURS_KEEP_DAYS),
            (tripwires.DAYS, HOURS_KEEP_DAYS),
        ):
            while await self._threads.run(self._tending.prune, width, days):
                pass
        for forget in (epochs.prune, changes.prune, workers.prune):
            await self._threads.run(self._database.write, forget)

    async def _aside(self, work: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
        """Do a piece of what no price waits for: one at a time, and with a rest after each."""
        async with self._others:
            began = time.monotonic()
            done = await self._threads.run(work, *args, **kwargs)
            await asyncio.sleep(REST * (time.monotonic() - began))
            return done

    async def _audit(self, line_items: list[str]) -> list[auditing.Piece]:
        pieces, frozen = await self._aside(auditing.audit_on, self._database, line_items)
        for name in frozen:
            logger.critical("the stream of line item %s disagrees; it is frozen", name)
        return pieces

    async def _until_none(self, prune: Callable[[Writing, int], int], bound_ms: int) -> None:
        while await self._threads.run(self._database.write, lambda c: prune(c, bound_ms)):
            pass

    async def _unfinished(self, names: list[str]) -> list[str]:
        """Teach some line items together; returns those that must go on alone."""
        every = self._habits.checkpoint_entries
        try:
            read = await self._threads.run(
                teachers.teach_together, self._database, names, lesson, every, lawful
            )
        except (UnreadableMemory, UnreadableTree):
            # Nothing was taught; alone, the one that is damaged is told from the others.
            return names
        self._board.ring()
        return [name for name, count in read.items() if count >= teachers.share_of(len(names))]

    async def _teach(self, line_item: str) -> int:
        every = self._habits.checkpoint_entries
        try:
            read = await self._threads.run(
                teachers.teach, self._database, line_item, lesson, every, lawful
            )
        except (UnreadableMemory, UnreadableTree):
            # Of another release, or damaged; the stream has all that it was made from.
            logger.exception("a learner's state cannot be read; its stream is read again")
            await self._refold(line_item)
            # As if a full page had been read, so that the caller begins with the refold at once.
            return teachers.ENTRIES_MAX
        self._board.ring()
        return read

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
