"""What line items did by minute, hour and day, as sums that the clerk adds new entries to.

Apart from findings. What a sum means is the rules' business; here it is a column of integers.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing

# Numbers that are kept in rows: in another order old buckets would change their width.
MINUTES, HOURS, DAYS = 0, 1, 2
COUNTS = (
    *("bids", "wins", "losses", "voids", "late", "paid", "spent", "words", "zeros"),
    *("parked", "unparked", "logs", "log_squares", "refused", "unfunded", "disputed", "halted"),
)
# Bounds of one statement; a night without a clerk is caught up page by page.
ACTIVE_MAX = 200
ENTRIES_MAX = 5000
PRUNED_MAX = 5000

Row = tuple[int, tuple[int, ...]]  # The beginning of a bucket and its sums, in the order above.
Entry = tuple[int, str, str | None, dict[str, Any], int]  # Wall ms, kind, slot, body, cost.


@dataclass(frozen=True, slots=True)
class Standing:
    """
    Where one line item stands, and what was last seen of it.

    Args:
        head: The last seq of its stream; `seq` is the last that was counted.
        gauges: Unfunded and disputed nanos and whether its learner is halted, now.
        gauges_seen: The same when it was last looked at.
    """

    line_item: str
    head: int
    seq: int
    gauges: tuple[int, int, int]
    gauges_seen: tuple[int, int, int]


def active(connection: Reading, due_ms: int, now_ms: int, after: str) -> list[Standing]:
    """
    The next line items with anything new or open that nobody has looked at since `due_ms`.

    Args:
        after: The id behind which to go on, so that one which cannot be counted stops no other.
    """
    row = {"due": due_ms, "now": now_ms, "after": after, "limit": ACTIVE_MAX}
    rows = connection.execute(_ACTIVE, row)
    return [
        Standing(
            row.line_item, row.head, row.seq, (row.unfunded, row.disputed, row.halted),
            (row.unfunded_seen, row.disputed_seen, row.halted_seen),
        )
        for row in rows
    ]  # fmt: skip


def entries(connection: Reading, line_item: str, seq: int) -> tuple[list[Entry], int]:
    """The next entries after `seq`, and the seq of the last of them; a damaged body is empty."""
    row = {"id": line_item, "seq": seq, "limit": ENTRIES_MAX}
    found = connection.execute(_ENTRIES, row).all()
    read = [(one.at_ms, one.kind, one.slot, _body(one.body), one.cost) for one in found]
    return read, found[-1].seq if found else seq


def advance(
    connection: Writing,
    standing: Standing,
    seq: int,
    looked_ms: int,
    sums: Mapping[tuple[int, int], Sequence[int]],
) -> bool:
    """
    Add what was counted up to `seq`; False when another clerk has done so already.

    Args:
        looked_ms: When it was looked at; 0 where more waits to be counted.
        sums: By width and beginning of the bucket.
    """
    gauges = dict(zip(("unfunded", "disputed", "halted"), standing.gauges, strict=True))
    mark = {"id": standing.line_item, "seq": seq, "was": standing.seq, "now": looked_ms, **gauges}
    # Guarded by what was counted before: of two clerks that read the same entries one adds them.
    done = connection.execute(_ADVANCE, mark).rowcount or connection.execute(_BEGIN, mark).rowcount
    if not done:
        return False
    rows = [
        {"id": standing.line_item, "width": width, "start": start}
        | dict(zip(COUNTS, counts, strict=True))
        for (width, start), counts in sorted(sums.items())
    ]
    if rows:
        connection.execute(_ADD, rows)
    return True


def gauges(connection: Reading, line_item: str) -> tuple[int, int, int]:
    """Unfunded and disputed nanos of a line item, and whether its learner is halted."""
    row = connection.execute(_GAUGES, {"id": line_item}).one()
    return row.unfunded, row.disputed, row.halted


def take_refusals(connection: Writing, line_item: str) -> int:
    """How many reports were refused since somebody asked last."""
    statement = text("DELETE FROM refused_outcomes WHERE line_item = :id RETURNING refusals")
    return int(connection.execute(statement, {"id": line_item}).scalar_one_or_none() or 0)


def refuse(connection: Writing, counts: Mapping[str, int]) -> None:
    """Count refused reports by line item; of one we do not have there is nothing to count."""
    # Sorted, so that two workers never wait for each other.
    for name, refusals in sorted(counts.items()):
        connection.execute(_REFUSE, {"id": name, "n": refusals})


def buckets(
    connection: Reading,
    line_item: str,
    width: int,
    from_ms: int,
    phases: tuple[int, int, int, int] | None = None,
) -> list[Row]:
    """
    The buckets of one width from a moment on, in order.

    Args:
        phases: A moment from which every bucket is wanted, the length of a day and two places in
            it; of the buckets before it only those at these places are read, and the first.
    """
    # Without phases every bucket lies behind the moment, so that the places never matter.
    every_ms, day_ms, *places = phases or (from_ms, 1, 0, 0)
    row = {"id": line_item, "width": width, "start": from_ms, "every": every_ms, "day": day_ms}
    found = connection.execute(_BUCKETS, row | {"one": places[0], "two": places[1]})
    return [(start, tuple(sums)) for start, *sums in found]


def prune(connection: Writing, width: int, before_ms: int) -> int:
    """Forget some of the oldest buckets of one width; returns how many."""
    row = {"width": width, "before": before_ms, "limit": PRUNED_MAX}
    return connection.execute(_PRUNE, row).rowcount


def _body(text_of: str) -> dict[str, Any]:
    try:
        body = json.loads(text_of)
    except ValueError:
        return {}
    return body if isinstance(body, dict) else {}


# By keys alone and without the stream, since it runs every few seconds over all line items.
_ACTIVE = text(
    "SELECT b.line_item, b.seq AS head, coalesce(m.seq, 0) AS seq, b.unfunded, b.disputed,"
    " l.halted, coalesce(m.unfunded, 0) AS unfunded_seen,"
    " coalesce(m.disputed, 0) AS disputed_seen, coalesce(m.halted, 0) AS halted_seen"
    " FROM balance b JOIN learner l ON l.line_item = b.line_item"
    " LEFT JOIN tripwire_mark m ON m.line_item = b.line_item"
    " WHERE b.line_item > :after AND (m.line_item IS NULL"
    # A wall clock that was set back must not make anybody blind until it has caught up.
    " OR ((m.looked_ms <= :due OR m.looked_ms > :now) AND ("
    " b.seq > m.seq OR l.halted <> m.halted OR l.halted = 1"
    " OR b.unfunded <> m.unfunded OR b.disputed <> m.disputed"
    " OR EXISTS (SELECT 1 FROM refused_outcomes r WHERE r.line_item = b.line_item)"
    " OR EXISTS (SELECT 1 FROM tripwire_finding f WHERE f.line_item = b.line_item"
    " AND f.cleared_ms IS NULL)))) ORDER BY b.line_item LIMIT :limit"
)
_GAUGES = text(
    "SELECT b.unfunded, b.disputed, l.halted FROM balance b"
    " JOIN learner l ON l.line_item = b.line_item WHERE b.line_item = :id"
)
_ENTRIES = text(
    "SELECT seq, at_ms, kind, slot, body, cost FROM stream"
    " WHERE line_item = :id AND seq > :seq ORDER BY seq LIMIT :limit"
)
_ADVANCE = text(
    "UPDATE tripwire_mark SET seq = :seq, looked_ms = :now, unfunded = :unfunded,"
    " disputed = :disputed, halted = :halted WHERE line_item = :id AND seq = :was"
)
# Only for a standing that was read without a mark: one that has counted must find its own.
_BEGIN = text(
    "INSERT INTO tripwire_mark (line_item, seq, looked_ms, unfunded, disputed, halted)"
    " SELECT :id, :seq, :now, :unfunded, :disputed, :halted"
    " WHERE CAST(:was AS BIGINT) = 0 ON CONFLICT DO NOTHING"
)
_ADD = text(
    f"INSERT INTO tripwire_bucket (line_item, width, start_ms, {', '.join(COUNTS)})"  # noqa: S608
    f" VALUES (:id, :width, :start, {', '.join(f':{name}' for name in COUNTS)})"
    " ON CONFLICT (line_item, width, start_ms) DO UPDATE SET "
    + ", ".join(f"{name} = tripwire_bucket.{name} + excluded.{name}" for name in COUNTS)
)
_BUCKETS = text(
    f"SELECT start_ms, {', '.join(COUNTS)} FROM tripwire_bucket"  # noqa: S608
    " WHERE line_item = :id AND width = :width AND start_ms >= :start"
    " AND (start_ms >= :every OR start_ms % :day IN (:one, :two)"
    # The first, which may be a part of one, or another would be taken for it and left out.
    " OR start_ms = (SELECT min(start_ms) FROM tripwire_bucket WHERE line_item = :id"
    " AND width = :width AND start_ms >= :start)) ORDER BY start_ms"
)
# Selected from what we have, so that an id out of a forged ticket makes no row.
_REFUSE = text(
    "INSERT INTO refused_outcomes (line_item, refusals)"
    " SELECT id, :n FROM line_item WHERE id = :id ON CONFLICT (line_item)"
    " DO UPDATE SET refusals = refused_outcomes.refusals + excluded.refusals"
)
# In pieces, since SQLite lets one writer in at a time and money waits meanwhile.
_PRUNE = text(
    "DELETE FROM tripwire_bucket WHERE (line_item, width, start_ms) IN"
    " (SELECT line_item, width, start_ms FROM tripwire_bucket"
    " WHERE width = :width AND start_ms < :before LIMIT :limit)"
)
