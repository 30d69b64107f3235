"""What people read back, page by page or as a whole: stream, ledger, lessons, decisions, journal.

Every page is one short read in a thread; an export is a row of them, so it holds no
transaction open, blocks nobody and needs the memory of one page.
"""

from __future__ import annotations

from collections.abc import AsyncIterator, Callable
from dataclasses import dataclass, replace
from functools import partial
from typing import Any

from service.errors import Overloaded
from service.ledger.accounts import NO_LIMIT
from service.recounting import (
    LESSON_KINDS,
    MONEY_KINDS,
    chart_told,
    decision_row,
    entry_row,
    journal_row,
    lesson_row,
    money_row,
)
from service.store import charting, lessons, line_items, records
from service.store.database import Database, Reading
from service.store.records import FIRST, LAST, Logged
from service.threads import Threads

EXPORTS_MAX = 2  # At once in one worker: each keeps a thread busy that outcomes may want.
BLOCK_ROWS = 2000  # Of an export, in one read.

Place = tuple[int, ...]  # A seq, or a moment and a number.
Rows = list[dict[str, Any]]
LOGS = {"decisions": "decision", "journal": "journal"}
KINDS_OF = {"stream": (), "ledger": MONEY_KINDS, "lessons": LESSON_KINDS}


@dataclass(frozen=True, slots=True)
class Wish:
    """
    Which rows of a list are wanted; times in wall clock ms.

    Args:
        name: stream, ledger, lessons, decisions or journal.
        line_item: None for the journal of all.
        until_ms: The first moment that is not wanted.
        kinds: Kinds of entry, actions of the journal, or "bid" or "pass"; none: all.
        filters: Of decisions: reason, set_by and source, each with its text.
    """

    name: str
    line_item: str | None
    from_ms: int | None = None
    until_ms: int | None = None
    kinds: tuple[str, ...] = ()
    filters: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Span:
    """What is left to read: everything between two places, both left out."""

    after: Place
    before: Place


@dataclass(frozen=True, slots=True)
class Page:
    """
    Rows, newest first, and the place before which the next page begins, or None at the end.

    Args:
        summary: What stands above the rows: of the ledger its balances, days and slices.
    """

    rows: Rows
    further: Place | None
    summary: dict[str, Any]


class Records:
    """Reads back for one worker."""

    def __init__(self, database: Database, threads: Threads) -> None:
        self._database, self._threads = database, threads
        self._exports = 0

    async def page(self, wish: Wish, before: Place | None, limit: int) -> Page:
        """
        One page, newest first.

        Raises:
            NotFound: There is no such line item.
        """

        def work(connection: Reading) -> Page:
            config, span = _span(connection, wish)
            # A cursor only ever narrows what the filters leave.
            if before is not None:
                span = replace(span, before=min(before, span.before))
            rows, rest = _read(connection, wish, config, span, limit, newest_first=True)
            summary = _summary(connection, wish, config)
            return Page(rows, rest.before if rest else None, summary)

        return await self._threads.run(self._database.read, work)

    async def chart(self, line_item: str, from_ms: int, until_ms: int) -> dict[str, Any]:
        """
        What happened between two moments, in at most 300 steps.

        Raises:
            NotFound: There is no such line item.
        """

        def work(connection: Reading) -> dict[str, Any]:
            line_items.one(connection, line_item)
            return chart_told(charting.chart(connection, line_item, from_ms, until_ms))

        return await self._threads.run(self._database.read, work)

    async def export(self, wish: Wish) -> Export:
        """
        Everything that is there now and fits, oldest first.

        Raises:
            NotFound: There is no such line item.
            Overloaded: Too many exports are under way.
        """
        if self._exports >= EXPORTS_MAX:
            raise Overloaded("too many exports at once")
        self._exports += 1
        try:
            config, span = await self._threads.run(self._database.read, lambda c: _whole(c, wish))
        except BaseException:
            self._ended()
            raise
        return Export(self._database, self._threads, wish, config, span, self._ended)

    def _ended(self) -> None:
        self._exports -= 1


class Export:
    """
    One export under way; whoever opened it closes it, whatever becomes of its reader.

    Args:
        config: Of the line item, or nothing for the journal of all.
    """

    def __init__(
        self,
        database: Database,
        threads: Threads,
        wish: Wish,
        config: dict[str, Any],
        span: Span | None,
        ended: Callable[[], None],
    ) -> None:
        self.config = config
        self._database, self._threads, self._wish = database, threads, wish
        self._span, self._ended = span, ended

    async def blocks(self, write: Callable[[Rows], bytes]) -> AsyncIterator[bytes]:
        """
        The rows block by block, written in the thread that reads them.

        Raises:
            StoreAway: The database went away; what was sent is not all.
        """
        span = self._span
        while span is not None:
            work = partial(self._block, span, write)
            block, span = await self._threads.run(self._database.read, work)
            if block:
                yield block

    def close(self) -> None:
        """Let another one begin."""
        ended, self._ended = self._ended, _nothing
        ended()

    def _block(
        self, span: Span, write: Callable[[Rows], bytes], connection: Reading
    ) -> tuple[bytes, Span | None]:
        rows, rest = _read(
            connection, self._wish, self.config, span, BLOCK_ROWS, newest_first=False
        )
        return write(rows), rest


def _nothing() -> None:
    """What closing a second time does."""


def _span(connection: Reading, wish: Wish) -> tuple[dict[str, Any], Span]:
    """The configuration of the line item, and where the rows lie that the times leave."""
    name = wish.line_item
    config = {} if name is None else line_items.one(connection, name).config
    if wish.name in LOGS or name is None:
        # No number is below 0, so these are the places before the first row of a moment.
        after = (FIRST if wish.from_ms is None else wish.from_ms, -1)
        return config, Span(after, (LAST if wish.until_ms is None else wish.until_ms, -1))
    first = 0 if wish.from_ms is None else records.seq_before(connection, name, wish.from_ms)
    if wish.until_ms is None:
        last = records.head(connection, name)
    else:
        last = records.seq_before(connection, name, wish.until_ms)
    return config, Span((first,), (last + 1,))


def _whole(connection: Reading, wish: Wish) -> tuple[dict[str, Any], Span | None]:
    """As `_span`, but ending with what is newest now: what comes later would have no end."""
    config, span = _span(connection, wish)
    if wish.name not in LOGS:
        return config, span
    newest, _ = records.logged(connection, replace(_logged(wish, span), filters=()), 1)
    if not newest:
        return config, None
    return config, replace(span, before=(newest[0].at_ms, newest[0].number + 1))


def _read(
    connection: Reading,
    wish: Wish,
    config: dict[str, Any],
    span: Span,
    limit: int,
    *,
    newest_first: bool,
) -> tuple[Rows, Span | None]:
    """Rows as people read them, and what is left to read."""
    if wish.name in LOGS:
        logged = _logged(wish, span)
        logs, further = records.logged(connection, logged, limit, newest_first=newest_first)
        shape = decision_row if wish.name == "decisions" else journal_row
        return [shape(row) for row in logs], _beyond(span, further, newest_first)
    name, (after,), (before,) = wish.line_item or "", span.after, span.before
    kinds = wish.kinds or KINDS_OF[wish.name]
    place: Place | None = None
    # In order and of many kinds, a run of seqs costs less than a search kind by kind.
    if not newest_first and len(kinds) > 1:
        until = min(after + limit, before - 1)
        found = list(records.window(connection, name, after, until, kinds))
        place = (until,) if until < before - 1 else None
        return _entry_rows(connection, wish, config, found), _beyond(span, place, newest_first)
    found = records.entries(
        connection, name, after, before, kinds, limit + 1, newest_first=newest_first
    )
    place = (found[limit - 1].seq,) if len(found) > limit else None
    rows = _entry_rows(connection, wish, config, found[:limit])
    return rows, _beyond(span, place, newest_first)


def _beyond(span: Span, place: Place | None, newest_first: bool) -> Span | None:
    if place is None:
        return None
    return replace(span, before=place) if newest_first else replace(span, after=place)


def _logged(wish: Wish, span: Span) -> Logged:
    filters = dict[str, object](wish.filters)
    if wish.name == "journal" and wish.kinds:
        filters["actions"] = list(wish.kinds)
    # Both kinds of decision are all of them.
    elif len(set(wish.kinds)) == 1:
        filters[wish.kinds[0]] = True
    after, before = (span.after[0], span.after[1]), (span.before[0], span.before[1])
    named = tuple(sorted(filters.items(), key=lambda one: one[0]))
    return Logged(LOGS[wish.name], wish.line_item, after, before, named)


def _entry_rows(connection: Reading, wish: Wish, config: dict[str, Any], found: list[Any]) -> Rows:
    if wish.name != "lessons":
        shape = money_row if wish.name == "ledger" else entry_row
        return [shape(row) for row in found]
    name, ceiling = wish.line_item or "", config["value"]["ceiling"]
    cancelled = lessons.cancellations(connection, name)
    left = lessons.left_of(connection, name, found, cancelled)
    return [lesson_row(row, left[row.seq], cancelled, ceiling) for row in found]


def _summary(connection: Reading, wish: Wish, config: dict[str, Any]) -> dict[str, Any]:
    """What stands above the rows of a ledger; nothing above others."""
    name = wish.line_item
    if wish.name != "ledger" or name is None:
        return {}
    sums = records.balance(connection, name)
    free = max(0, sums["target"] - sums["spent"] - sums["held"])
    days = [_limited(day) for day in records.days(connection, name)]
    slices = records.open_slices(connection, name)
    return {
        "line_item": name,
        "currency": config["currency"],
        "balance": _in_nanos({**sums, "free": free}, ("budget", *sums, "free")),
        "days": [_in_nanos(day, ("target", "spent", "held", "over_spent")) for day in days],
        "slices": [
            _in_nanos({**one, "id": bytes(one["id"]).hex()}, ("amount", "remaining", "owed"))
            for one in slices
        ],
    }


def _limited(day: dict[str, Any]) -> dict[str, Any]:
    return {**day, "target": None if day["target"] == NO_LIMIT else day["target"]}


def _in_nanos(row: dict[str, Any], names: tuple[str, ...]) -> dict[str, Any]:
    return {f"{name}_nanos" if name in names else name: value for name, value in row.items()}
