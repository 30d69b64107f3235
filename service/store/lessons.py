"""The stream as a learner reads it: without what is cancelled, apart from whose state it feeds."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from itertools import groupby
from operator import attrgetter
from typing import Any

from sqlalchemy import LargeBinary, text

from service.ledger.cancelling import Cancelled, Finder, Span, Told, left, retold
from service.ledger.entries import Body
from service.store import bodies
from service.store.database import Reading, Writing, among
from service.store.leases import read_configs

# Kind, body, service time, wall clock and cost.
Lesson = tuple[str, Body, int, int, int]
SPENT = "spent"  # The kind of an entry of which only the cost is left.
ROWS_MAX = 2000


@dataclass(frozen=True, slots=True)
class Page:
    """
    The next entries of a stream.

    Args:
        lessons: What they teach, those left out that teach no more.
        seqs: The seq of each lesson.
        read: How many entries were read.
        end: The seq of the last of them.
    """

    lessons: list[Lesson]
    seqs: list[int]
    read: int
    end: int


def read(
    connection: Reading | Writing, line_item: str, seq: int, limit: int, cancelled: Cancelled
) -> Page:
    """The entries after `seq`, at most so many."""
    rows = connection.execute(_AFTER, {"id": line_item, "seq": seq, "limit": limit}).all()
    return _page(connection, line_item, rows, cancelled) if rows else Page([], [], 0, seq)


def next_pages(
    connection: Reading | Writing, limit: int, cancelled: Mapping[str, Cancelled]
) -> dict[str, Page]:
    """The next entries of each learner of these line items; of one that has read all, none."""
    row = {"ids": list(cancelled), "limit": limit}
    by_name = groupby(connection.execute(_NEXT, row), attrgetter("line_item"))
    return {name: _page(connection, name, list(rows), cancelled[name]) for name, rows in by_name}


def _page(
    connection: Reading | Writing, line_item: str, rows: Sequence[Any], cancelled: Cancelled
) -> Page:
    rests = left_of(connection, line_item, rows, cancelled)
    page, seqs = list[Lesson](), list[int]()
    for number, kind, _, at_ms, service_ms, cost, *_ in rows:
        rest = rests[number]
        if rest is not None or cost:
            said = (SPENT, {}) if rest is None else (kind, rest)
            page.append((*said, service_ms, at_ms, cost))
            seqs.append(number)
    return Page(page, seqs, len(rows), rows[-1].seq)


def left_of(
    connection: Reading | Writing, line_item: str, rows: Sequence[Any], cancelled: Cancelled
) -> dict[int, Body | None]:
    """What is left of each of these entries, by seq; None where it teaches no more."""
    # Nearly always nothing is cancelled, and then all of each entry is left.
    if not cancelled:
        return {row.seq: _body(row.body) for row in rows}
    # What a value adds depends on what came before it, some of which may be cancelled now.
    values = [bytes(row.bid) for row in rows if row.kind == "value" and row.bid is not None]
    again = _values_again(connection, line_item, values, cancelled)
    rests = dict[int, Body | None]()
    for row in rows:
        body = again.get(row.seq, _body(row.body))
        rests[row.seq] = None if body is None else left(row.seq, row.kind, body, cancelled)
    return rests


def cancellations(
    connection: Reading | Writing, line_item: str, paid_by: str | None = None
) -> Cancelled:
    """What is cancelled on a stream; who knows by what its impressions are paid may say so."""
    if paid_by is None:
        paid_by = read_configs(connection, [line_item])[line_item]["spend_on"]
    return cancellations_of(connection, {line_item: paid_by})[line_item]


def cancellations_of(
    connection: Reading | Writing, paid_by: Mapping[str, str]
) -> dict[str, Cancelled]:
    """What is cancelled on each of these streams, by what their impressions are paid by."""
    spans: dict[str, list[Span]] = {name: [] for name in paid_by}
    for name, part, told in connection.execute(_CANCELLED, {"ids": list(paid_by)}):
        spans[name] += [(first, last, part) for first, last in json.loads(told)]
    return {name: Cancelled(spans[name], paid) for name, paid in paid_by.items()}


def cancel(
    connection: Writing, line_item: str, by_seq: int, part: str, spans: Iterable[Span]
) -> None:
    """Note what an entry of the stream cancels of one part; the entry says the same."""
    # In one row: an order may name ten thousands of spans, and every page of lessons reads them.
    told = json.dumps([[first, last] for first, last, _ in spans])
    row = {"id": line_item, "by": by_seq, "part": part, "spans": told}
    connection.execute(_CANCEL, row)


def uncancel(connection: Writing, line_item: str, seq: int) -> None:
    """Let one entry that was set aside alone teach again."""
    connection.execute(
        # Found by its text, which `cancel` writes the same way for an entry set aside alone.
        text("DELETE FROM cancelled WHERE line_item = :id AND part = 'all' AND spans = :spans"),
        {"id": line_item, "spans": json.dumps([[seq, seq]])},
    )


def find(
    connection: Reading | Writing,
    line_item: str,
    finder: Finder,
    goes_on: Callable[[], bool] = lambda: True,
) -> bool:
    """Let a finder read on to the end of the stream while there is time; whether it got there."""
    seq = finder.read_until
    while goes_on():
        row = {"id": line_item, "seq": seq, "limit": ROWS_MAX}
        rows = connection.execute(_AFTER, row).all()
        for one in rows:
            bid = None if one.bid is None else bytes(one.bid)
            finder.take(one.seq, one.kind, bid, one.at_ms, _body(one.body))
            seq = one.seq
        if len(rows) < ROWS_MAX:
            return True
    return False


def first_of(connection: Reading | Writing, line_item: str, bids: Iterable[bytes]) -> int:
    """The first seq that speaks of any of these bids, or 1."""
    row = {"ids": sorted(bids), "line_item": line_item}
    return int(connection.execute(_FIRST_OF, row).scalar_one_or_none() or 1)


def counts_after(
    connection: Reading | Writing, line_item: str, seq: int, kinds: list[str], cancelled: Cancelled
) -> dict[str, int]:
    """How many entries of each of these kinds after `seq` still teach something."""
    counts = dict[str, int]()
    for kind in kinds:
        row = {"id": line_item, "seq": seq, "kind": kind}
        counts[kind] = int(connection.execute(_COUNT, row).scalar_one())
    # Only where something is cancelled is each entry looked at: all of them may be millions.
    seen = seq
    for first, last, _ in sorted(cancelled.spans):
        row = {"id": line_item, "after": max(seen, first - 1), "last": last, "kinds": kinds}
        for one in connection.execute(_KINDS, row):
            counts[one.kind] -= not cancelled.leaves(one.seq, one.kind)
        seen = max(seen, last)
    return {kind: count for kind, count in counts.items() if count}


def began_ms(connection: Reading, line_item: str) -> int:
    """The service time at which a stream began."""
    statement = text("SELECT service_ms FROM stream WHERE line_item = :id AND seq = 1")
    return int(connection.execute(statement, {"id": line_item}).scalar_one())


def last_reset(connection: Reading | Writing, line_item: str, cancelled: Cancelled) -> int:
    """The seq of the last reset that was not undone, or 0."""
    statement = text("SELECT seq FROM stream WHERE line_item = :id AND kind = 'reset'")
    seqs = connection.execute(statement, {"id": line_item}).scalars().all()
    return max((int(seq) for seq in seqs if cancelled.leaves(seq, "reset")), default=0)


def _body(text_of: str) -> Body:
    """The body of an entry; a damaged one is empty, which the fold then cannot take."""
    try:
        body = bodies.parsed(text_of)
    except ValueError:
        return {}
    return body if isinstance(body, dict) else {}


def _values_again(
    connection: Reading | Writing, line_item: str, bids: list[bytes], cancelled: Cancelled
) -> dict[int, Body | None]:
    """The values of these bids as they would have been told, where something was cancelled."""
    of_bid = dict[bytes, list[Told]]()
    rows = connection.execute(_OF_BIDS, {"ids": sorted(set(bids)), "line_item": line_item})
    for row in rows:
        of_bid.setdefault(bytes(row.bid), []).append((row.seq, row.kind, _body(row.body)))
    told = dict[int, Body | None]()
    for entries in of_bid.values():
        if any(cancelled.parts(seq) for seq, _, _ in entries):
            told |= retold(entries, cancelled)
    return told


_AFTER = text(
    "SELECT seq, kind, bid, at_ms, service_ms, cost, body FROM stream"
    " WHERE line_item = :id AND seq > :seq ORDER BY seq LIMIT :limit"
)
# Seqs have no gaps, so that the next so many lie up to a number that is known.
_NEXT = among(
    "SELECT s.seq, s.kind, s.bid, s.at_ms, s.service_ms, s.cost, s.body, s.line_item"
    " FROM learner l JOIN stream s ON s.line_item = l.line_item AND s.seq > l.seq"
    " AND s.seq <= l.seq + :limit WHERE l.line_item IN :ids ORDER BY s.line_item, s.seq"
)
_OF_BIDS = among(
    "SELECT seq, kind, bid, body FROM stream WHERE bid IN :ids AND line_item = :line_item"
    " AND kind IN ('won', 'billed', 'value') ORDER BY seq",
    of=LargeBinary,
)
_KINDS = among(
    "SELECT seq, kind FROM stream WHERE line_item = :id AND seq > :after AND seq <= :last"
    " AND kind IN :kinds ORDER BY seq",
    "kinds",
)
_COUNT = text("SELECT count(*) FROM stream WHERE line_item = :id AND kind = :kind AND seq > :seq")
_FIRST_OF = among(
    "SELECT min(seq) FROM stream WHERE bid IN :ids AND line_item = :line_item", of=LargeBinary
)
_CANCELLED = among(
    "SELECT line_item, part, spans FROM cancelled WHERE line_item IN :ids"
    " ORDER BY line_item, by_seq"
)
_CANCEL = text(
    "INSERT INTO cancelled (line_item, by_seq, part, spans) VALUES (:id, :by, :part, :spans)"
)
