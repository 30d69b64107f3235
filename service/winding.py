"""Orders that take lessons back: retract what named outcomes taught, rewind to a moment.

Money is never touched. The learner is refolded from the nearest checkpoint before the first
lesson taken back; until its snapshot is out the line item passes `learner_halted`.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass
from typing import Any

from service.decision.describing import describe
from service.decision.price import ready
from service.decision.terms import Terms
from service.errors import Malformed
from service.guard.ticket import BadTicket, bid_of
from service.learner.memory import Memory
from service.ledger.cancelling import ALL, PARTS, Finder, Named, Span
from service.ledger.entries import Entry
from service.ordering import Orders, repeat_of
from service.store import learners, lessons, line_items, rebuilds, records
from service.store.books import Books
from service.store.database import Reading, Writing
from service.teaching import FRESH, lawful, lesson

LOOK_S = 0.02
REFOLD_S_MAX = 5.0  # After so long the answer goes out, and upkeep goes on with the fold.
SPANS_SHOWN_MAX = 20
SHOWN = (
    *("method", "wins", "known", "converted", "set_by", "pass"),
    *("mean_nanos", "low_nanos", "high_nanos"),
)


@dataclass(frozen=True, slots=True)
class Retraction:
    """
    What outcomes an operator names, in words of the API; times in wall clock ms.

    Args:
        part: "value", "market" or "both".
    """

    part: str
    refs: tuple[str, ...] = ()
    event_ids: tuple[str, ...] = ()
    source: str | None = None
    from_ms: int | None = None
    until_ms: int | None = None

    def named(self) -> Named:
        """
        The names as the stream knows them.

        Raises:
            Malformed: A ref is none, or nothing is named, or two ways of naming at once.
        """
        some = bool(self.refs or self.event_ids)
        wide = (self.source, self.from_ms, self.until_ms) != (None, None, None)
        if some == wide:
            detail = "Name refs and event_ids, or a source and a span of time."
            raise Malformed("names_nothing", detail)
        try:
            bids = frozenset(bid_of(ref) for ref in self.refs)
        except BadTicket as error:
            raise Malformed("bad_ref", "A ref is not of the form that bids carry.") from error
        wide_of = (self.source, self.from_ms, self.until_ms)
        return Named(self.part, bids, frozenset(self.event_ids), *wide_of)


@dataclass(frozen=True, slots=True)
class _Taken:
    """What an order takes back: spans of the stream and how many lessons of each kind."""

    spans: list[Span]
    counts: dict[str, int]


class Winding:
    """
    Takes lessons back for one worker.

    Args:
        checkpoint_entries: How often the refold keeps a checkpoint.
    """

    def __init__(self, orders: Orders, checkpoint_entries: int) -> None:
        self._orders, self._every = orders, checkpoint_entries

    async def retract(
        self,
        line_item: str,
        wish: Retraction,
        reason: str,
        actor: str,
        *,
        preview: bool = False,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """Cancel what the named outcomes taught; a repeat finds nothing left to cancel."""
        named = wish.named()
        if preview:
            return await self._shown(lambda c: _preview(c, line_item, _found(c, line_item, named)))
        # Read outside the lock first: a long stream must not hold up the money of its line item.
        finder = await self._orders.read(lambda c: _finder(c, line_item, named))

        def order(connection: Writing) -> dict[str, Any]:
            books = Books(connection, [line_item], self._orders.database.wall_ms())
            again = _again(connection, line_item, named, finder)
            said = {"part": wish.part, "named": asdict(wish)}
            return self._take(connection, books, line_item, "retract", again, said, reason, actor)

        call = {"call": "retract", "line_item": line_item, "reason": reason, **asdict(wish)}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        return await self.published(line_item, answer)

    async def rewind(
        self,
        line_item: str,
        to: int,
        reason: str,
        actor: str,
        *,
        at_ms: int | None = None,
        preview: bool = False,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """
        Put the learner back to what it had learnt at a seq, or at a moment when `at_ms` is given.

        Raises:
            Malformed: The stream has not come so far.
        """
        if preview:
            return await self._shown(
                lambda c: _preview(c, line_item, _after(c, line_item, to, at_ms)[1])
            )

        def order(connection: Writing) -> dict[str, Any]:
            books = Books(connection, [line_item], self._orders.database.wall_ms())
            seq, taken = _after(connection, line_item, to, at_ms)
            said = {"part": ALL, "to": seq}
            return self._take(connection, books, line_item, "rewind", taken, said, reason, actor)

        call = {"call": "rewind", "line_item": line_item, "reason": reason, "to": to, "at": at_ms}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        return await self.published(line_item, answer)

    async def _shown(self, preview: Callable[[Reading], dict[str, Any]]) -> dict[str, Any]:
        return dict(await self._orders.read(preview))

    def _take(
        self,
        connection: Writing,
        books: Books,
        line_item: str,
        kind: str,
        taken: _Taken,
        said: Mapping[str, Any],
        reason: str,
        actor: str,
    ) -> dict[str, Any]:
        """The common end of both orders, under the lock of the stream."""
        before = _estimate(connection, line_item)
        shown = _shown(line_item, taken)
        # Nothing is left to cancel, so a repeat leaves no trace in the stream and halts no bids.
        if not taken.spans:
            return {**shown, "seq": None, "before": before}
        cancels = [[first, last] for first, last, _ in taken.spans]
        body = {**said, "cancels": cancels, "counts": taken.counts}
        books.post(line_item, Entry(kind, {**body, "actor": actor, "reason": reason}))
        books.save()
        seq = books.accounts[line_item].seq
        detail = {"seq": seq, **said, "counts": taken.counts, "before": before}
        self._orders.note(connection, actor, kind, line_item, reason, detail)
        lessons.cancel(connection, line_item, seq, said["part"], taken.spans)
        start = rebuilds.put_back(connection, line_item, taken.spans, FRESH)
        return {**shown, "seq": seq, "refolds_from": start.seq, "before": before}

    async def published(self, line_item: str, answer: dict[str, Any]) -> dict[str, Any]:
        """Refold here and now as far as time allows, and say what the learner knows after."""
        until = time.monotonic() + REFOLD_S_MAX
        database, run = self._orders.database, self._orders.threads.run
        while await self._orders.read(lambda c: _halted(c, line_item)):
            if time.monotonic() > until:
                return {**answer, "published": False, "after": None}
            if not await run(learners.teach, database, line_item, lesson, self._every, lawful):
                await asyncio.sleep(LOOK_S)  # Another teacher is at it.
        after = await self._orders.read(lambda c: _estimate(c, line_item))
        return {**answer, "published": True, "after": after}


def _preview(connection: Reading, line_item: str, taken: _Taken) -> dict[str, Any]:
    """What an order would do, without doing it."""
    shown = {**_shown(line_item, taken), "preview": True}
    now = rebuilds.standing(connection, line_item)
    shown["before"] = _estimate(connection, line_item)
    if not taken.spans:
        return {**shown, "after": shown["before"]}
    cancelled = lessons.cancellations(connection, line_item).and_also(taken.spans)
    first = min(span[0] for span in taken.spans)
    start = rebuilds.nearest(connection, line_item, first - 1, FRESH)
    state = rebuilds.fold_until(connection, line_item, start, now.head, lesson, cancelled=cancelled)
    return {**shown, "after": _told(state, now.config)}


def _finder(connection: Reading | Writing, line_item: str, named: Named) -> Finder:
    line_items.one(connection, line_item)
    finder = Finder(named, lessons.cancellations(connection, line_item))
    lessons.find(connection, line_item, finder)
    return finder


def _found(connection: Reading, line_item: str, named: Named) -> _Taken:
    finder = _finder(connection, line_item, named)
    return _Taken(finder.spans, finder.counts)


def _again(connection: Writing, line_item: str, named: Named, finder: Finder) -> _Taken:
    """What was found, read on under the lock; anew when others have cancelled meanwhile."""
    now = lessons.cancellations(connection, line_item)
    if now.spans != finder.cancelled.spans:
        finder = Finder(named, now)
    lessons.find(connection, line_item, finder)
    return _Taken(finder.spans, finder.counts)


def _after(
    connection: Reading | Writing, line_item: str, to: int, at_ms: int | None
) -> tuple[int, _Taken]:
    """Every lesson behind a moment that still teaches, as one span, and the seq of the moment."""
    line_items.one(connection, line_item)
    head = rebuilds.standing(connection, line_item).head
    seq = to if at_ms is None else records.seq_before(connection, line_item, at_ms + 1)
    if seq > head:
        raise Malformed("not_so_far", "The stream of this line item has not come so far.")
    cancelled = lessons.cancellations(connection, line_item)
    counts = dict[str, int]()
    for n, kind in lessons.kinds_after(connection, line_item, seq, sorted(PARTS)):
        if cancelled.leaves(n, kind):
            counts[kind] = counts.get(kind, 0) + 1
    return seq, _Taken([(seq + 1, head, ALL)] if counts else [], counts)


def _halted(connection: Reading, line_item: str) -> bool:
    return learners.snapshots(connection, [line_item])[line_item].halted


def _estimate(connection: Reading | Writing, line_item: str) -> dict[str, Any]:
    """What the published snapshot knows and bids."""
    row = line_items.one(connection, line_item)
    return _told(learners.snapshots(connection, [line_item])[line_item].state, row.config)


def _told(state: bytes, config: Mapping[str, Any]) -> dict[str, Any]:
    told = describe(ready(Memory.from_bytes(state), Terms.from_config(config)))
    return {name: told[name] for name in SHOWN} | {"bid_cpm_nanos": told["bid_nanos"]}


def _shown(line_item: str, taken: _Taken) -> dict[str, Any]:
    spans = [[first, last] for first, last, _ in taken.spans[:SPANS_SHOWN_MAX]]
    return {
        "line_item": line_item,
        "cancelled": sum(taken.counts.values()),
        "counts": taken.counts,
        "spans": spans,
        "spans_in_all": len(taken.spans),
    }
