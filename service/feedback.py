"""The second story: outcomes come in with their tickets, and are durable before the receipt.

Requests that arrive together share one transaction. A group that fails for other than
connection or lock reasons is tried request by request, then row by row; a row that fails
alone is set aside and refused.
"""

from __future__ import annotations

import asyncio
import logging
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

from service import spans
from service.errors import BrokenPromise, Overloaded, StoreAway
from service.guard.ticket import TicketKeys, ref_of
from service.metrics.series import OTHER
from service.metrics.tally import Tally
from service.reporting import Reader, Receipt, Report, placed, receipt
from service.store import outcomes, tripwires
from service.store.bookings import Booked, Booking
from service.store.database import Database
from service.store.decisions import quarantine
from service.store.quarantines import written
from service.teaching import weigh
from service.threads import Threads

logger = logging.getLogger(__name__)

__all__ = ["ANSWER_S", "Feedback", "Receipt", "Report", "Room"]
ROWS_MAX = 2000
THREAD_S = 0.25  # How long a group waits for a thread, and so for a connection.
ANSWER_S = 6.0  # Longer than a statement may take: then nobody knows, and the caller asks again.
# What a single bad row may raise; anything else is a fault of ours and ends the worker's task.
POISON = (BrokenPromise, ValueError, LookupError, ArithmeticError, TypeError)


@dataclass(frozen=True, slots=True)
class Room:
    """How many calls may be under way at once, and how many rows may wait to be booked."""

    calls_max: int = 256
    rows_max: int = 20_000


@dataclass(slots=True)
class _Waiting:
    """The rows of one request and the future its receipt comes through."""

    rows: list[Booking]
    done: asyncio.Future[list[Booked]]


class Feedback:
    """Settles outcomes for one worker."""

    def __init__(
        self,
        database: Database,
        threads: Threads,
        keys: TicketKeys,
        incarnation: bytes,
        room: Room | None = None,
        tally: Tally | None = None,
    ) -> None:
        self._tally = tally or Tally()
        self._database, self._threads = database, threads
        self._reader = Reader(keys, incarnation)
        self._room, self._calls, self._rows = room or Room(), 0, 0
        self._queue: asyncio.Queue[_Waiting] = asyncio.Queue()
        # Of line items that our own tickets name, so that nobody can make it grow.
        self._refused: Counter[str] = Counter()

    def waiting(self) -> int:
        """Outcomes that wait to be booked."""
        return self._rows

    @contextmanager
    def admitted(self) -> Iterator[None]:
        """
        Room for one call; asked for before anything of it is read.

        Raises:
            Overloaded: There is none. Nothing was read, and nothing is lost when it comes again.
        """
        # The rows of a call are unknown until it is read; until then `calls_max` is the bound.
        if self._calls >= self._room.calls_max or self._rows >= self._room.rows_max:
            self._tally.add("outcome_calls_shed")
            raise Overloaded("too many outcomes wait already")
        self._calls += 1
        try:
            yield
        finally:
            self._calls -= 1

    async def report(
        self, reports: list[Report], only: frozenset[str] | None = None
    ) -> list[Receipt]:
        """
        Settle outcomes and values; when this returns they are durable.

        Args:
            only: The line items that exist for the caller; None for all.

        Raises:
            StoreAway: Perhaps recorded; the repeat answers `duplicate`.
            Overloaded: Not recorded, for nobody had time for it.
        """
        with spans.span("outcomes") as span:
            spans.note(span, rows=len(reports))
            receipts = await self._receipts(reports, only)
        self._count(reports, receipts)
        return receipts

    def _count(self, reports: list[Report], receipts: list[Receipt]) -> None:
        kinds, statuses = [said.kind for said in reports], [row.status for row in receipts]
        for labels, count in Counter(zip(kinds, statuses, strict=True)).items():
            self._tally.add("outcomes", *labels, count=count)
        refused = [row for row in receipts if row.status == "refused"]
        for code, count in Counter(row.code or OTHER for row in refused).items():
            self._tally.add("refused_outcomes", code, count=count)
        self._refused.update(row.line_item for row in refused if row.line_item)

    async def _receipts(self, reports: list[Report], only: frozenset[str] | None) -> list[Receipt]:
        read = [self._reader.read(report, only) for report in reports]
        # A bid that is named by its ref alone has to be looked up.
        if any(report.ticket is None for report in reports):
            read = await self._find_refs(reports, read, only)
        rows = [row for row in read if isinstance(row, Booking)]
        done = iter(await self._book(rows) if rows else [])
        return [row if isinstance(row, Receipt) else receipt(row, next(done)) for row in read]

    async def keep_refusals(self) -> None:
        """Count what was refused since the last time, for the tripwire on it."""
        if self._refused:
            taken, self._refused = self._refused, Counter()
            await self._threads.run(self._database.write, lambda c: tripwires.refuse(c, taken))

    async def run(self) -> None:
        """Book what waits, group by group, until cancelled."""
        while True:
            # Whatever arrived while the last group was written shares the next transaction.
            group = [await self._queue.get()]
            while not self._queue.empty() and sum(len(w.rows) for w in group) < ROWS_MAX:
                group.append(self._queue.get_nowait())
            # Who has been told to ask again will; booking his rows now would only take longer.
            if wanted := [waiting for waiting in group if not waiting.done.done()]:
                await self._settle(wanted)
            self._rows -= sum(len(waiting.rows) for waiting in group)

    async def _book(self, rows: list[Booking]) -> list[Booked]:
        waiting = _Waiting(rows, asyncio.get_running_loop().create_future())
        await self._queue.put(waiting)
        self._rows += len(rows)
        done, _ = await asyncio.wait([waiting.done], timeout=ANSWER_S)
        if not done:
            # Still in the queue or already durable: only the repeat can tell.
            waiting.done.cancel()
            raise StoreAway("the outcomes were not booked in time")
        return waiting.done.result()

    async def _settle(self, group: list[_Waiting]) -> None:
        try:
            rows = [row for waiting in group for row in waiting.rows]
            with spans.span("commit") as span:
                spans.note(span, rows=len(rows))
                booked = await self._threads.run_within(
                    THREAD_S, outcomes.book, self._database, rows, weigh
                )
        except (StoreAway, Overloaded) as error:
            # No use in trying them apart: each would meet the same database, one after the other.
            for waiting in group:
                _fail(waiting, error)
        except POISON:
            logger.exception("a group of outcomes could not be booked; trying it apart")
            await self._settle_apart(group)
        else:
            at = 0
            for waiting in group:
                _finish(waiting, booked[at : (at := at + len(waiting.rows))])

    async def _settle_apart(self, group: list[_Waiting]) -> None:
        if len(group) > 1:
            for waiting in group:
                await self._settle([waiting])
            return
        try:
            booked = [await self._alone(row) for row in group[0].rows]
        except StoreAway as error:
            _fail(group[0], error)
        else:
            _finish(group[0], booked)

    async def _alone(self, row: Booking) -> Booked:
        try:
            return (await self._threads.run(outcomes.book, self._database, [row], weigh))[0]
        except POISON as error:
            # Kept before it is refused, for nobody sends a refused outcome again.
            await self._threads.run(self._set_aside, row, error)
            return Booked("refused", "quarantined")

    def _set_aside(self, row: Booking, error: Exception) -> None:
        body = {**written(row), "ref": ref_of(row.event.bid)}
        self._database.write(
            lambda connection: quarantine(
                connection,
                row.line_item,
                f"{type(error).__name__}: {error}",
                body,
                self._database.wall_ms(),
            )
        )

    async def _find_refs(
        self,
        reports: list[Report],
        read: list[Booking | Receipt],
        only: frozenset[str] | None,
    ) -> list[Booking | Receipt]:
        """Give values that came by ref the line item of their settled win."""
        bookings = [row for row in read if isinstance(row, Booking)]
        loose = {row.event.bid for row in bookings if not row.line_item}
        if not loose:
            return read
        found = await self._threads.run(
            self._database.read, lambda connection: outcomes.find_wins(connection, loose)
        )
        # The win may stand in the same call; if it does not, the value waits for it.
        found |= {row.event.bid: row.line_item for row in bookings if row.line_item}
        pairs = zip(read, reports, strict=True)
        return [placed(row, found, report.ref, only) for row, report in pairs]


def _fail(waiting: _Waiting, error: StoreAway | Overloaded) -> None:
    # Whoever waited for too long is gone, and a cancelled future takes no result.
    if not waiting.done.done():
        waiting.done.set_exception(error)


def _finish(waiting: _Waiting, booked: list[Booked]) -> None:
    if not waiting.done.done():
        waiting.done.set_result(booked)
