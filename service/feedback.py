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
from datetime import date
from functools import lru_cache
from typing import NamedTuple

from service import spans
from service.errors import BrokenPromise, Overloaded, StoreAway
from service.guard.ticket import BadTicket, Ticket, TicketKeys, bid_of, ref_of
from service.ledger.entries import PAYING
from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.metrics.series import OTHER
from service.metrics.tally import Tally
from service.money import PRICE_NANOS_MAX
from service.store import outcomes, tripwires
from service.store.bookings import NO_SNAPSHOT, Booked, Booking
from service.store.database import Database
from service.store.decisions import quarantine
from service.store.quarantines import written
from service.teaching import weigh
from service.threads import Threads

logger = logging.getLogger(__name__)

ROWS_MAX = 2000
COST_MAX = 4 * PRICE_NANOS_MAX  # Beyond any bid: a currency or a unit was mistaken.
THREAD_S = 0.25  # How long a group waits for a thread, and so for a connection.
ANSWER_S = 6.0  # Longer than a statement may take: then nobody knows, and the caller asks again.
# What a single bad row may raise; anything else is a fault of ours and ends the worker's task.
POISON = (BrokenPromise, ValueError, LookupError, ArithmeticError, TypeError)


class Report(NamedTuple):
    """
    One reported outcome; prices in nanos per impression, values in nanos.

    Args:
        currency: Of the prices, where the reporter names it.
        delivered: Impressions that came of the sale, in parts of 10^9, if they were told.
        at_the_bid: The price is not told at all: the most it can be is booked.
    """

    kind: str
    ticket: str | None = None
    ref: str | None = None
    clearing: int | None = None
    to_win: int | None = None
    value: int | None = None
    event_id: str | None = None
    corrects: str | None = None
    why: str | None = None
    at: str | None = None
    currency: str | None = None
    delivered: int | None = None
    at_the_bid: bool = False


class Receipt(NamedTuple):
    """
    What became of one report; `code` says why when it is refused.

    Args:
        foreign: Refused because the line item does not exist for the caller's key.
    """

    ref: str | None
    status: str
    code: str | None = None
    clipped: bool = False
    test: bool = False
    detail: str | None = None
    foreign: bool = False
    line_item: str | None = None  # As far as a ticket or a ref has named it.


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
        self._keys, self._incarnation = keys, incarnation
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
        read = [self._read(report, only) for report in reports]
        # A bid that is named by its ref alone has to be looked up.
        if any(report.ticket is None for report in reports):
            read = await self._find_refs(reports, read, only)
        rows = [row for row in read if isinstance(row, Booking)]
        done = iter(await self._book(rows) if rows else [])
        return [row if isinstance(row, Receipt) else _receipt(row, next(done)) for row in read]

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

    def _read(self, report: Report, only: frozenset[str] | None = None) -> Booking | Receipt:
        """The booking a report asks for, or the receipt that refuses it."""
        if report.ticket is None:
            return _read_ref(report)
        try:
            ticket = self._keys.verify(report.ticket)
        except BadTicket:
            return Receipt(report.ref, "refused", "bad_ticket")
        if only is not None and ticket.line_item not in only:
            return Receipt(report.ref, "refused", "no_such_line_item", foreign=True)
        if report.ref is not None and report.ref != ticket.ref:
            return Receipt(report.ref, "refused", "ref_of_another_bid", line_item=ticket.line_item)
        if report.currency is not None and report.currency != ticket.scale.currency:
            return Receipt(ticket.ref, "refused", "other_currency", line_item=ticket.line_item)
        pays = report.kind in PAYING
        price = _price(report, ticket) if pays else 0
        if price is None or price > COST_MAX:
            code = "no_price" if price is None else "bad_price"
            return Receipt(ticket.ref, "refused", code, line_item=ticket.line_item)
        # Nothing was held for it, so there is nothing to book and nothing to learn.
        if ticket.test:
            return Receipt(ticket.ref, "recorded", test=True)
        return self._booking(report, ticket, price if pays else None)

    def _booking(self, report: Report, ticket: Ticket, price: int | None) -> Booking:
        if report.kind == "value":
            return Booking(ticket.line_item, _value(report, ticket.bid))
        outcome = Outcome(
            report.kind,
            ticket.bid,
            ticket.counter,
            ticket.price,
            ticket.source,
            price,
            None if report.to_win is None else _to_win(report.to_win, ticket),
            report.why,
            report.at,
            ticket.auction,
        )
        # A slice of a database before its restore may be gone or be another's: the late way.
        here = ticket.incarnation == self._incarnation
        return Booking(
            ticket.line_item,
            outcome,
            ticket.slice if here else None,
            _day(ticket.day),
            # And the same snapshot may have had another law there.
            ticket.snapshot if here else NO_SNAPSHOT,
            ticket.floor,
            ticket.features,
            ticket.hint,
            ticket.arm,
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
        return [_placed(row, found, report.ref, only) for row, report in pairs]


@lru_cache(maxsize=64)
def _day(ordinal: int) -> str:
    """The date of a ticket's day; all tickets of an hour name one or two of them."""
    return date.fromordinal(ordinal).isoformat()


def _price(report: Report, ticket: Ticket) -> int | None:
    """What it cost, fees included; who pays what he bids need not be told."""
    if report.clearing is not None:
        return ticket.fees.gross(ticket.scale.paid(report.clearing, report.delivered))
    bid_is_paid = report.kind == "won" and ticket.auction != "second"
    return ticket.price if bid_is_paid or report.at_the_bid else None


def _to_win(price: int, ticket: Ticket) -> int | None:
    """The least cost that would have won; what no ledger can hold says nothing."""
    cost = ticket.fees.gross(ticket.scale.paid(price))
    return cost if cost <= COST_MAX else None


def _read_ref(report: Report) -> Booking | Receipt:
    """A value may come by ref alone; its line item is looked up after."""
    if report.kind != "value" or report.ref is None:
        return Receipt(report.ref, "refused", "no_ticket")
    try:
        return Booking("", _value(report, bid_of(report.ref)))
    except BadTicket:
        return Receipt(None, "refused", "bad_ref")


def _placed(
    row: Booking | Receipt,
    found: dict[bytes, str],
    ref: str | None,
    only: frozenset[str] | None,
) -> Booking | Receipt:
    if isinstance(row, Receipt) or row.line_item:
        return row
    known = row.event.bid in found
    # Answered as a ref that nobody has, or a guesser would learn which are taken.
    if not known or (only is not None and found[row.event.bid] not in only):
        return Receipt(ref, "refused", "no_such_ref", foreign=known)
    return Booking(found[row.event.bid], row.event)


def _value(report: Report, bid: bytes) -> Value:
    return Value(bid, report.event_id or "", report.value or 0, report.corrects, report.at)


def _receipt(row: Booking, booked: Booked) -> Receipt:
    status, code, clipped = booked
    return Receipt(ref_of(row.event.bid), status, code, clipped, line_item=row.line_item)


def _fail(waiting: _Waiting, error: StoreAway | Overloaded) -> None:
    # Whoever waited for too long is gone, and a cancelled future takes no result.
    if not waiting.done.done():
        waiting.done.set_exception(error)


def _finish(waiting: _Waiting, booked: list[Booked]) -> None:
    if not waiting.done.done():
        waiting.done.set_result(booked)
