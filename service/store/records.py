"""Pages of what was recorded, by keys that stay when rows are added: stream, decisions, journal.

Every page is one bounded read. Moments of a stream are found by halving it, since its stamps
never decrease; decisions and the journal are kept by (at_ms, number).
"""

from __future__ import annotations

import functools
from collections.abc import Sequence
from dataclasses import dataclass
from heapq import merge
from itertools import islice
from typing import Any

from sqlalchemy import TextClause, text

from service.store.clock import now_ms
from service.store.database import Reading, Writing, among
from service.store.leases import NEVER_MS

# Beyond any moment or number, and still within 64 bits on both databases.
FIRST, LAST = 0, 2**62
LOOKED_AT_MAX = 20_000  # Rows that one page may pass over while it looks for those that fit.
SLICES_MAX = 200
DAYS_MAX = 62

Place = tuple[int, int]  # A moment and a number; rows lie strictly between two places.
Row = Any


@dataclass(frozen=True, slots=True)
class Logged:
    """
    Which rows of a log are wanted.

    Args:
        table: "decision" or "journal".
        line_item: None: of all; for the journal only.
        filters: Names out of FILTERS, in their order, each with its value if it takes one.
    """

    table: str
    line_item: str | None
    after: Place = (FIRST, FIRST)
    before: Place = (LAST, LAST)
    filters: tuple[tuple[str, object], ...] = ()


def logged(
    connection: Reading, wish: Logged, limit: int, *, newest_first: bool = True
) -> tuple[list[Row], Place | None]:
    """
    The next rows of a log, and the place where a further page goes on, or None at the end.

    A page may be short, even empty, and still not be the last: where few rows fit, it ends
    after so many that were looked at.
    """
    names = tuple(name for name, _ in wish.filters)
    # One row more than wanted tells whether there is a further page, without counting.
    row = _bounds(wish) | dict(wish.filters) | {"limit": limit + 1, "look": LOOKED_AT_MAX}
    statement = _logged(wish.table, wish.line_item is None, names, newest_first)
    found = list(connection.execute(statement, row))
    if len(found) > limit:
        return found[:limit], (found[limit - 1].at_ms, found[limit - 1].number)
    if not names:
        return found, None
    # Few rows fit, perhaps because the look ended: go on behind the last one looked at.
    seen = _last_seen(wish.table, wish.line_item is None, newest_first)
    last = connection.execute(seen, row).one_or_none()
    return found, None if last is None else (last.at_ms, last.number)


def entries(
    connection: Reading,
    line_item: str,
    after: int,
    before: int,
    kinds: Sequence[str],
    limit: int,
    *,
    newest_first: bool = True,
) -> list[Row]:
    """The entries of a stream between two seqs, both left out; of these kinds, if any is named."""
    row = {"id": line_item, "after": after, "before": before, "limit": limit}
    if not kinds:
        return list(connection.execute(_STREAM[newest_first], row))
    # Kind by kind, so that a rare one is found without reading all that lies between.
    found = [connection.execute(_OF_KIND[newest_first], row | {"kind": k}) for k in kinds]
    # Each kind comes in order of its seqs already, so that nothing is sorted again.
    merged = merge(*found, key=lambda entry: int(entry.seq), reverse=newest_first)
    return list(islice(merged, limit))


def window(
    connection: Reading, line_item: str, after: int, until: int, kinds: Sequence[str]
) -> Any:
    """The entries of these kinds in a short run of seqs, in order."""
    row = {"id": line_item, "after": after, "until": until, "kinds": list(kinds)}
    return connection.execute(_WINDOW, row).all()


def seq_before(connection: Reading | Writing, line_item: str, at_ms: int) -> int:
    """The last seq stamped before a moment of the wall clock, or 0."""
    low, high = 0, head(connection, line_item)
    # Stamps never decrease and seqs have no gaps, so that no index by time is needed.
    while low < high:
        middle = (low + high + 1) // 2
        row = connection.execute(_STAMP, {"id": line_item, "seq": middle}).one_or_none()
        low, high = (middle, high) if row is not None and row.at_ms < at_ms else (low, middle - 1)
    return low


def head(connection: Reading | Writing, line_item: str) -> int:
    """The last seq of a stream, or 0."""
    statement = text("SELECT seq FROM balance WHERE line_item = :id")
    return int(connection.execute(statement, {"id": line_item}).scalar_one_or_none() or 0)


def balance(connection: Reading, line_item: str) -> dict[str, int]:
    """The balance of a line item, in nanos."""
    statement = text(
        "SELECT budget, target, spent, held, unfunded, disputed FROM balance WHERE line_item = :id"
    )
    return dict(connection.execute(statement, {"id": line_item}).one()._mapping)


def days(connection: Reading, line_item: str) -> list[dict[str, Any]]:
    """The newest local days, newest first, in nanos."""
    statement = text(
        "SELECT day, target, spent, held, over_spent FROM local_day WHERE line_item = :id"
        " ORDER BY day DESC LIMIT :limit"
    )
    rows = connection.execute(statement, {"id": line_item, "limit": DAYS_MAX})
    return [dict(row._mapping) for row in rows]


def open_slices(connection: Reading, line_item: str) -> list[dict[str, Any]]:
    """
    Slices that still hold money, those that end first in front; moments on the wall clock.

    A moment is None where only a person ends it. Service time stands still in an outage, so
    each is the earliest.
    """
    now = now_ms(connection)
    wall = connection.execute(text("SELECT seen_ms FROM service_clock")).scalar_one()
    found = []
    for row in connection.execute(_SLICES, {"id": line_item, "limit": SLICES_MAX}):
        one = dict(row._mapping)
        for name in ("expires_ms", "close_ms", "billing_close_ms"):
            one[name] = None if one[name] >= NEVER_MS else int(wall + one[name] - now)
        found.append(one)
    return found


# Named one by one: a column that a later release adds must not change what is told.
COLUMNS = {
    "decision": "number, at_ms, line_item, ref, request_id, source, floor, price, reason, set_by,"
    " snapshot, test",
    "journal": "number, at_ms, actor, action, line_item, reason, detail",
}
FILTERS = {
    "bid": "price IS NOT NULL",
    "pass": "price IS NULL",
    "reason": "reason = :reason",
    "set_by": "set_by = :set_by",
    "source": "source = :source",
    "actions": "action IN :actions",
}


def _bounds(wish: Logged) -> dict[str, object]:
    return {
        "id": wish.line_item,
        "after_ms": wish.after[0],
        "after": wish.after[1],
        "before_ms": wish.before[0],
        "before": wish.before[1],
    }


# There are few combinations, and a statement that is the same object is compiled once.
@functools.cache
def _logged(table: str, of_all: bool, names: tuple[str, ...], newest_first: bool) -> TextClause:
    rows, order = _rows(table, of_all), _order(newest_first)
    if not names:
        return text(" ".join(("SELECT", COLUMNS[table], rows, order, "LIMIT :limit")))
    fits = " AND ".join(FILTERS[name] for name in names)
    # Cut before it is filtered: a reason that never occurs must not read the whole log.
    looked_at = " ".join(("(SELECT", COLUMNS[table], rows, order, "LIMIT :look) looked_at"))
    words = ("SELECT", COLUMNS[table], "FROM", looked_at, "WHERE", fits, order, "LIMIT :limit")
    statement = " ".join(words)
    return among(statement, "actions") if "actions" in names else text(statement)


@functools.cache
def _last_seen(table: str, of_all: bool, newest_first: bool) -> TextClause:
    words = ("SELECT at_ms, number", _rows(table, of_all), _order(newest_first))
    return text(" ".join((*words, "LIMIT 1 OFFSET :look - 1")))


def _rows(table: str, of_all: bool) -> str:
    mine = "" if of_all else "line_item = :id AND"
    # Pairs are compared as a whole, which both databases answer from the index by time.
    between = "(at_ms, number) > (:after_ms, :after) AND (at_ms, number) < (:before_ms, :before)"
    return " ".join(("FROM", table, "WHERE", mine, between))


def _order(newest_first: bool) -> str:
    return "ORDER BY at_ms DESC, number DESC" if newest_first else "ORDER BY at_ms, number"


_ENTRY = "SELECT seq, kind, bid, slot, at_ms, service_ms, cost, body FROM stream"
_BETWEEN = "WHERE line_item = :id AND seq > :after AND seq < :before"
_STREAM = {
    newest: text(" ".join((_ENTRY, _BETWEEN, order, "LIMIT :limit")))
    for newest, order in ((True, "ORDER BY seq DESC"), (False, "ORDER BY seq"))
}
_OF_KIND = {
    newest: text(" ".join((_ENTRY, _BETWEEN, "AND kind = :kind", order, "LIMIT :limit")))
    for newest, order in ((True, "ORDER BY seq DESC"), (False, "ORDER BY seq"))
}
_WINDOW = among(
    " ".join((_ENTRY, "WHERE line_item = :id AND seq > :after AND seq <= :until",
              "AND kind IN :kinds ORDER BY seq")),
    "kinds",
)  # fmt: skip
_STAMP = text("SELECT at_ms FROM stream WHERE line_item = :id AND seq = :seq")
_SLICES = text(
    "SELECT id, worker, day, state, amount, remaining, owed, expires_ms, close_ms,"
    " billing_close_ms FROM slice WHERE line_item = :id AND remaining + owed > 0"
    " ORDER BY close_ms, id LIMIT :limit"
)
