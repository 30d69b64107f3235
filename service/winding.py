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

from service.errors import Malformed
from service.guard.ticket import BadTicket, bid_of
from service.ledger.cancelling import ALL, Finder, Named
from service.ledger.entries import Entry
from service.ordering import Orders, repeat_of
from service.previewing import (
    GoesOn,
    Taken,
    after,
    begun,
    estimate,
    finder,
    found,
    preview_reset,
    shown,
)
from service.previewing import preview as preview_of
from service.store import learners, lessons, rebuilds, teachers
from service.store.books import Books
from service.store.database import Reading, Writing
from service.store.learners import digest_of
from service.teaching import FRESH, lawful, lesson

LOOK_S = 0.02
REFOLD_S_MAX = 5.0  # After so long the answer goes out, and upkeep goes on with the fold.
PREVIEW_S_MAX = 5.0  # After so long a preview says how far it came.


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


class Winding:
    """
    Takes lessons back for one worker.

    Args:
        checkpoint_entries: How often the refold keeps a checkpoint.
    """

    def __init__(self, orders: Orders, checkpoint_entries: int) -> None:
        self._orders, self._every = orders, checkpoint_entries
        self.preview_s_max = PREVIEW_S_MAX

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
            return await self._previewed(
                line_item, "retract", lambda c, goes_on: found(c, line_item, named, goes_on)
            )
        # Read outside the lock first: a long stream must not hold up the money of its line item.
        looked, _ = await self._orders.read(lambda c: finder(c, line_item, named))

        def order(connection: Writing) -> dict[str, Any]:
            books = Books(connection, [line_item], self._orders.database.wall_ms())
            again = _again(connection, line_item, named, looked)
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
            return await self._previewed(
                line_item, "rewind", lambda c, _: after(c, line_item, to, at_ms)[1]
            )

        def order(connection: Writing) -> dict[str, Any]:
            books = Books(connection, [line_item], self._orders.database.wall_ms())
            seq, taken = after(connection, line_item, to, at_ms)
            said = {"part": ALL, "to": seq}
            return self._take(connection, books, line_item, "rewind", taken, said, reason, actor)

        call = {"call": "rewind", "line_item": line_item, "reason": reason, "to": to, "at": at_ms}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        return await self.published(line_item, answer)

    async def reset(
        self,
        line_item: str,
        reason: str,
        actor: str,
        *,
        preview: bool = False,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """Let the learner begin afresh; money and the stream before it stay as they are."""
        database, goes_on = self._orders.database, self._time()
        if preview:
            told: dict[str, Any] = await self._orders.read(
                lambda c: preview_reset(c, line_item, database.wall_ms(), goes_on)
            )
            return told

        def order(connection: Writing) -> dict[str, Any]:
            books = Books(connection, [line_item], database.wall_ms())
            before = estimate(connection, line_item)
            books.post(line_item, Entry("reset", {"actor": actor, "reason": reason}))
            books.save()
            seq = books.accounts[line_item].seq
            learners.begin_afresh(connection, line_item, seq)
            detail = {"before": {"seq": seq - 1, **before}, "after": {"seq": seq}}
            self._orders.note(connection, actor, "reset", line_item, reason, detail)
            return {"line_item": line_item, "seq": seq, **detail}

        call = {"call": "reset", "line_item": line_item, "reason": reason}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        published = await self.published(line_item, answer, answer["seq"])
        # The seq of the order stays beside what the learner knows after it.
        return {**published, "after": {**answer["after"], **(published["after"] or {})}}

    async def _previewed(
        self, line_item: str, kind: str, find: Callable[[Reading, GoesOn], Taken]
    ) -> dict[str, Any]:
        goes_on, wall_ms = self._time(), self._orders.database.wall_ms()

        def work(connection: Reading) -> dict[str, Any]:
            taken = find(connection, goes_on)
            return preview_of(connection, line_item, taken, kind, wall_ms, goes_on)

        told: dict[str, Any] = await self._orders.read(work)
        return told

    def _take(
        self,
        connection: Writing,
        books: Books,
        line_item: str,
        kind: str,
        taken: Taken,
        said: Mapping[str, Any],
        reason: str,
        actor: str,
    ) -> dict[str, Any]:
        """The common end of both orders, under the lock of the stream."""
        before = estimate(connection, line_item)
        told = shown(line_item, taken)
        # Nothing is left to cancel, so a repeat leaves no trace in the stream and halts no bids.
        if not taken.spans:
            return {**told, "seq": None, "before": before}
        cancels = [[first, last] for first, last, _ in taken.spans]
        body = {**said, "cancels": cancels, "counts": taken.counts}
        books.post(line_item, Entry(kind, {**body, "actor": actor, "reason": reason}))
        books.save()
        seq = books.accounts[line_item].seq
        detail = {"seq": seq, **said, "counts": taken.counts, "before": before}
        self._orders.note(connection, actor, kind, line_item, reason, detail)
        lessons.cancel(connection, line_item, seq, said["part"], taken.spans)
        start = rebuilds.put_back(connection, line_item, taken.spans, FRESH)
        return {**told, "seq": seq, "refolds_from": start.seq, "before": before}

    async def published(
        self, line_item: str, answer: dict[str, Any], seq: int = 0
    ) -> dict[str, Any]:
        """
        Refold here and now as far as time allows, and say what the learner knows after.

        Args:
            seq: Where the learner must have come to, beside bidding by what it knows.
        """
        until = time.monotonic() + REFOLD_S_MAX
        database, run = self._orders.database, self._orders.threads.run
        while await self._orders.read(lambda c: _pending(c, line_item, seq)):
            if time.monotonic() > until:
                return {**answer, "published": False, "after": None}
            if not await run(teachers.teach, database, line_item, lesson, self._every, lawful):
                await asyncio.sleep(LOOK_S)  # Another teacher is at it.
        known = await self._orders.read(lambda c: estimate(c, line_item))
        return {**answer, "published": True, "after": known}

    def _time(self) -> GoesOn:
        """Whether a preview may go on; it stops in time for its answer to go out."""
        until = time.monotonic() + self.preview_s_max
        return lambda: time.monotonic() < until


def _again(connection: Writing, line_item: str, named: Named, looked: Finder) -> Taken:
    """What was found, read on under the lock; anew when others have cancelled meanwhile."""
    now = lessons.cancellations(connection, line_item)
    if now.spans != looked.cancelled.spans:
        looked = begun(connection, line_item, named, now)
    lessons.find(connection, line_item, looked)
    return Taken(looked.spans, looked.counts)


def _pending(connection: Reading, line_item: str, seq: int) -> bool:
    """Whether the learner is still being refolded, or has not published what it knows at a seq."""
    now = rebuilds.standing(connection, line_item)
    behind = seq and (now.seq < seq or digest_of(now.working) != now.snapshot.digest)
    return now.snapshot.halted or bool(behind)
