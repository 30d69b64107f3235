"""Counts for charts, kept per five minutes, so that a chart of a week reads no single decision.

Decisions are counted in the transaction that logs them, entries of the stream by the clerk,
each once. Prices are kept by bins of a quarter of a doubling: quantiles are within 9 %.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import groupby
from operator import attrgetter
from typing import Any

from sqlalchemy import text

from service.store import bodies
from service.store.database import Database, Reading, Writing, among

# The finest step that is kept; coarser ones are summed when a chart is read.
FIVE_MINUTES_MS = 300_000
ENTRIES_MAX = 2000
TOGETHER = 20  # Line items counted in one transaction.
BUCKETS_MAX = 300
# Bins add up over minutes and processes, which kept quantiles would not.
BINS_PER_DOUBLING = 4
NOTHING_BIN = -1  # Of a price of 0, which has no logarithm.
MINUTE_MS = 60_000
# Steps at which people read a clock; beyond the last, whole days.
STEPS_MS = tuple(m * MINUTE_MS for m in (5, 10, 15, 20, 30, 60, 120, 180, 240, 360, 720, 1440))
REFUNDED = "reversal"  # The kind of entry whose cost was taken back.
OUTCOMES = ("won", "lost", "void", "billed", "value")

Row = dict[str, Any]
Key = tuple[str, int, str, str]  # Line item, start of the five minutes, what, name.


@dataclass(frozen=True, slots=True)
class Quantiles:
    """Prices in nanos per impression, each the middle of a bin, so at most 9 % off."""

    low: int
    median: int
    high: int
    count: int


@dataclass(slots=True)
class Bucket:
    """
    What happened in one step of a chart; money in nanos.

    Args:
        at_ms: When it begins, on the wall clock.
        cost: Costs booked less refunds: what was spent, was unfunded or is disputed.
        counts: By kind of outcome, and "bid" for bids that left.
        value: What impressions brought, corrections included.
        passes: How many decisions passed, by reason.
        set_by: How many bids each part set.
        bids: The 10, 50 and 90 % quantile of bids that left.
        clearing: The same of clearing prices of wins.
    """

    at_ms: int
    cost: int = 0
    value: int = 0
    counts: dict[str, int] = field(default_factory=dict)
    passes: dict[str, int] = field(default_factory=dict)
    set_by: dict[str, int] = field(default_factory=dict)
    bids: Quantiles | None = None
    clearing: Quantiles | None = None


@dataclass(frozen=True, slots=True)
class Chart:
    """
    Steps of one length, none left out.

    Args:
        behind: Entries of the stream that are not counted yet; the clerk is at it.
    """

    line_item: str
    from_ms: int
    until_ms: int
    step_ms: int
    behind: int
    buckets: list[Bucket]


def chart(
    connection: Reading,
    line_item: str,
    from_ms: int,
    until_ms: int,
    buckets_max: int = BUCKETS_MAX,
) -> Chart:
    """What happened between two moments, in at most so many steps; begins on a whole step."""
    step_ms = _step_ms(until_ms - from_ms, buckets_max)
    begin_ms = from_ms - from_ms % step_ms
    row = {"id": line_item, "from": begin_ms, "until": until_ms, "step": step_ms}
    places = range(max(1, -(-(until_ms - begin_ms) // step_ms)))
    buckets = [Bucket(begin_ms + place * step_ms) for place in places]
    bids, clearing = [Counter[int]() for _ in places], [Counter[int]() for _ in places]
    for found in connection.execute(_CHART, row):
        place, n, nanos = int(found.place), int(found.n), int(found.nanos)
        if found.what in ("bid", "won"):
            (bids if found.what == "bid" else clearing)[place][int(found.name)] += n
        _fill(buckets[place], found.what, found.name, n, nanos)
    for place, bucket in enumerate(buckets):
        bucket.bids, bucket.clearing = _quantiles(bids[place]), _quantiles(clearing[place])
    behind = int(connection.execute(_BEHIND, row).scalar_one_or_none() or 0)
    return Chart(line_item, begin_ms, until_ms, step_ms, behind, buckets)


def delays(
    connection: Reading, line_item: str, from_ms: int, until_ms: int
) -> list[tuple[int, int, int]]:
    """First values by how long after their win they came: from ms, until ms, how many."""
    rows = connection.execute(_DELAYS, {"id": line_item, "from": from_ms, "until": until_ms})
    found = {int(row.name): int(row.n) for row in rows}
    bins = range(min(found, default=0), max(found, default=-1) + 1)
    return [(2**at if at else 0, 2 ** (at + 1), found.get(at, 0)) for at in bins]


def add(connection: Writing, counted: Mapping[Key, tuple[int, int]]) -> None:
    """Add counts and nanos to what is there."""
    # In one order for everybody, or two who add at once could wait for each other.
    rows = [
        {"id": key[0], "at": key[1], "what": key[2], "name": key[3], "n": n, "nanos": nanos}
        for key, (n, nanos) in sorted(counted.items())
    ]
    if rows:
        connection.execute(_ADD, rows)


def of_decisions(decisions: Iterable[Row]) -> dict[Key, tuple[int, int]]:
    """What decisions add; tests cost nobody anything and count for nothing."""
    counted = dict[Key, tuple[int, int]]()
    for one in decisions:
        # A chart that counted tests would show bids that could never win.
        if one["test"]:
            continue
        place = one["line_item"], _five(one["at_ms"])
        if one["price"] is None:
            _count(counted, (*place, "pass", one["reason"]))
            continue
        _count(counted, (*place, "bid", _bin(one["price"])), 1, one["price"])
        _count(counted, (*place, "set_by", one["set_by"] or ""))
    return counted


def roll(database: Database, entries_max: int = ENTRIES_MAX) -> int:
    """Count what is new in every stream, a piece of each; returns how many entries that were."""
    found = database.read(behind)
    pieces = range(0, len(found), TOGETHER)
    return sum(count(database, found[at : at + TOGETHER], entries_max) for at in pieces)


def behind(connection: Reading) -> Sequence[Any]:
    """The line items with entries that are not counted yet, and the seq up to which they are."""
    return connection.execute(_ALL_BEHIND).all()


def prune(connection: Writing, before_ms: int) -> int:
    """Forget counts from before this wall clock moment; returns how many rows went."""
    # By line item, with which the key of the counts begins: no scan of the whole table.
    names = connection.execute(text("SELECT line_item FROM charted")).scalars().all()
    rows = [{"id": name, "before": before_ms} for name in names]
    return sum(connection.execute(_PRUNE, row).rowcount for row in rows)


def readable(told: str) -> dict[str, Any]:
    """The body of an entry; a damaged one is empty: the audit will find it, not a chart."""
    try:
        body = bodies.parsed(told)
    except ValueError:
        return {}
    return body if isinstance(body, dict) else {}


def count(database: Database, some: Sequence[Any], entries_max: int = ENTRIES_MAX) -> int:
    """Count some line items in one transaction: a commit for each would hold up all writers."""
    was = {one.line_item: one.seq for one in some}
    wanted = {"ids": list(was), "limit": max(1, entries_max // len(some))}
    # Read outside of the write, for parsing is slow and SQLite lets one writer in at a time.
    rows = database.read(lambda connection: connection.execute(_NEXT, wanted).all())
    pages = {name: list(page) for name, page in groupby(rows, attrgetter("line_item"))}
    pieces = [
        ({"id": name, "was": was[name], "seq": page[-1].seq}, _of_entries(name, page))
        for name, page in pages.items()
    ]

    def work(connection: Writing) -> None:
        counted = dict[Key, tuple[int, int]]()
        for kept, found in pieces:
            # Another clerk may have counted this piece since; whose guard fails adds nothing.
            if connection.execute(_KEEP, kept).rowcount == 1:
                counted |= found
        add(connection, counted)

    database.write(work)
    return len(rows)


def _of_entries(line_item: str, rows: Iterable[Any]) -> dict[Key, tuple[int, int]]:
    counted = dict[Key, tuple[int, int]]()
    for _, kind, at_ms, service_ms, cost, body, *_ in rows:
        place = line_item, _five(at_ms)
        if cost:
            _count(counted, (*place, "cost", ""), 1, -cost if kind == REFUNDED else cost)
        if kind in ("won", "value"):
            _count_said(counted, place, kind, service_ms, readable(body))
        elif kind in OUTCOMES:
            _count(counted, (*place, kind, ""))
    return counted


def _count_said(
    counted: dict[Key, tuple[int, int]],
    place: tuple[str, int],
    kind: str,
    service_ms: int,
    body: dict[str, Any],
) -> None:
    """Wins and values, of which more is counted than that they were told."""
    price, amount, was = body.get("price"), body.get("amount"), body.get("was")
    if kind == "won":
        # One that names no price we can read is still a win.
        nanos = price if isinstance(price, int) else 0
        _count(counted, (*place, "won", _bin(nanos)), 1, nanos)
    elif isinstance(amount, int):
        first = was is None
        _count(counted, (*place, "value", ""), int(first), amount - (was or 0))
        # What waited for its win came no sooner than the win, but nobody knows when.
        if first and amount and isinstance(body.get("won_ms"), int) and not body.get("parked"):
            late_ms = max(1, service_ms - body["won_ms"])
            _count(counted, (*place, "delay", str(late_ms.bit_length() - 1)))


def _count(counted: dict[Key, tuple[int, int]], key: Key, n: int = 1, nanos: int = 0) -> None:
    before = counted.get(key, (0, 0))
    counted[key] = before[0] + n, before[1] + nanos


def _fill(bucket: Bucket, what: str, name: str, n: int, nanos: int) -> None:
    if what == "cost":
        bucket.cost += nanos
    elif what in ("pass", "set_by"):
        (bucket.passes if what == "pass" else bucket.set_by)[name] = n
    elif what != "delay":
        bucket.counts[what] = bucket.counts.get(what, 0) + n
        bucket.value += nanos if what == "value" else 0


def _quantiles(bins: Counter[int]) -> Quantiles | None:
    count = bins.total()
    if not count:
        return None
    low, median, high = (_quantile(bins, count, share) for share in (0.1, 0.5, 0.9))
    return Quantiles(low, median, high, count)


def _quantile(bins: Counter[int], count: int, share: float) -> int:
    left = max(1, math.ceil(share * count))
    for at in sorted(bins):
        left -= bins[at]
        if left <= 0:
            return 0 if at == NOTHING_BIN else round(2 ** ((at + 0.5) / BINS_PER_DOUBLING))
    return 0


def _bin(price: int) -> str:
    return str(math.floor(BINS_PER_DOUBLING * math.log2(price)) if price > 0 else NOTHING_BIN)


def _five(at_ms: int) -> int:
    return int(at_ms - at_ms % FIVE_MINUTES_MS)


def _step_ms(span_ms: int, buckets_max: int) -> int:
    # One less, since the first step may begin before the moment asked for.
    least = max(1, span_ms) / max(1, buckets_max - 1)
    days = math.ceil(least / STEPS_MS[-1])
    return next((step for step in STEPS_MS if step >= least), days * STEPS_MS[-1])


_CHART = text(
    "SELECT (at_ms - :from) / :step AS place, what, name, sum(n) AS n, sum(nanos) AS nanos"
    " FROM chart_count WHERE line_item = :id AND at_ms >= :from AND at_ms < :until"
    " GROUP BY place, what, name"
)
_DELAYS = text(
    "SELECT name, sum(n) AS n FROM chart_count WHERE line_item = :id AND at_ms >= :from"
    " AND at_ms < :until AND what = 'delay' GROUP BY name"
)
# Added to, not replaced: decisions and entries of one five minutes come in many pieces.
_ADD = text(
    "INSERT INTO chart_count (line_item, at_ms, what, name, n, nanos)"
    " VALUES (:id, :at, :what, :name, :n, :nanos) ON CONFLICT (line_item, at_ms, what, name)"
    " DO UPDATE SET n = chart_count.n + excluded.n, nanos = chart_count.nanos + excluded.nanos"
)
# Seqs have no gaps, so that the next so many lie up to a number that is known.
_NEXT = among(
    "SELECT s.seq, s.kind, s.at_ms, s.service_ms, s.cost, s.body, s.line_item FROM balance b"
    " LEFT JOIN charted c ON c.line_item = b.line_item JOIN stream s"
    " ON s.line_item = b.line_item AND s.seq > coalesce(c.seq, 0)"
    " AND s.seq <= coalesce(c.seq, 0) + :limit"
    " WHERE b.line_item IN :ids ORDER BY s.line_item, s.seq"
)
_KEEP = text(
    "INSERT INTO charted (line_item, seq) VALUES (:id, :seq) ON CONFLICT (line_item)"
    " DO UPDATE SET seq = excluded.seq WHERE charted.seq = :was"
)
_BEHIND = text(
    "SELECT b.seq - coalesce(c.seq, 0) FROM balance b LEFT JOIN charted c"
    " ON c.line_item = b.line_item WHERE b.line_item = :id"
)
_ALL_BEHIND = text(
    "SELECT b.line_item, coalesce(c.seq, 0) AS seq FROM balance b LEFT JOIN charted c"
    " ON c.line_item = b.line_item WHERE b.seq > coalesce(c.seq, 0) ORDER BY b.line_item"
)
_PRUNE = text("DELETE FROM chart_count WHERE line_item = :id AND at_ms < :before")
