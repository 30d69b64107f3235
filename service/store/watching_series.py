"""Named reads behind the charts of a line item, bounded: ten million decisions cost no more."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store import charting
from service.store.database import Reading

# What a chart can show row by row; beyond it nobody would see single rows anyway.
ENTRIES_MAX = 10_000
DECISIONS_MAX = 5000
CHECKPOINTS_MAX = 16


@dataclass(frozen=True, slots=True)
class Series:
    """
    What charts are drawn of, oldest first; money in nanos, moments in wall clock ms.

    Args:
        bids: When and at what price bids left: each one, or the median of each step.
        bids_counted: How many bids that is; `capped` of them were set by the cap.
        costs: When and how much was booked.
        clearing: When and at what price auctions were won: each, or the median of each step.
        wins_counted: How many wins that is.
        delays: First values by how long after their win they came: from ms, until ms, how many.
        day_spent: Booked on the local day so far.
        step_ms: The length of a step, or None where every row is shown.
    """

    wall_ms: int
    bids: list[tuple[int, int]]
    bids_counted: int
    capped: int
    costs: list[tuple[int, int]]
    clearing: list[tuple[int, int]]
    wins_counted: int
    delays: list[tuple[int, int, int]]
    day_spent: int
    step_ms: int | None


def series(connection: Reading, line_item: str, from_ms: int, wall_ms: int, day: str) -> Series:
    """What happened since a moment: row by row where there are few, else by steps of a clock."""
    wanted = {"id": line_item, "from": from_ms}
    entries = list(connection.execute(_ENTRIES, {**wanted, "limit": ENTRIES_MAX}))
    decided = list(connection.execute(_BIDS, {**wanted, "limit": DECISIONS_MAX}))
    spent = connection.execute(_DAY, {"id": line_item, "day": day}).scalar_one_or_none()
    delays = charting.delays(connection, line_item, from_ms, wall_ms + 1)
    # A bound that is met may have cut something off, and a part must not look like the whole.
    if len(entries) == ENTRIES_MAX or len(decided) == DECISIONS_MAX:
        return _by_steps(connection, line_item, from_ms, wall_ms, delays, int(spent or 0))
    # Read newest first, so that a bound cuts the oldest; drawn oldest first.
    entries.reverse()
    decided.reverse()
    wins = [(int(row.at_ms), price) for row in entries if (price := _price(row)) is not None]
    return Series(
        wall_ms,
        [(int(row.at_ms), int(row.price)) for row in decided],
        len(decided),
        sum(row.set_by == "cap" for row in decided),
        [(int(row.at_ms), int(row.cost)) for row in entries if row.cost],
        wins,
        len(wins),
        delays,
        int(spent or 0),
        None,
    )


def _by_steps(
    connection: Reading,
    line_item: str,
    from_ms: int,
    wall_ms: int,
    delays: list[tuple[int, int, int]],
    day_spent: int,
) -> Series:
    chart = charting.chart(connection, line_item, from_ms, wall_ms + 1)
    buckets, middle = chart.buckets, chart.step_ms // 2
    return Series(
        wall_ms,
        [(one.at_ms + middle, one.bids.median) for one in buckets if one.bids],
        sum(one.counts.get("bid", 0) for one in buckets),
        sum(one.set_by.get("cap", 0) for one in buckets),
        # Booked when its step ends, so that a chart never shows money before it went.
        [(min(one.at_ms + chart.step_ms, wall_ms), one.cost) for one in buckets if one.cost],
        [(one.at_ms + middle, one.clearing.median) for one in buckets if one.clearing],
        sum(one.counts.get("won", 0) for one in buckets),
        delays,
        day_spent,
        chart.step_ms,
    )


def checkpoints(connection: Reading, line_item: str) -> list[tuple[int, bytes, int]]:
    """The newest kept learner states, oldest first: seq, state and when it was kept."""
    rows = connection.execute(_CHECKPOINTS, {"id": line_item, "limit": CHECKPOINTS_MAX}).all()
    return [(int(row.seq), bytes(row.state), int(row.at_ms)) for row in reversed(rows)]


def moments(connection: Reading, line_item: str, seqs: list[int]) -> list[int]:
    """When these entries of a stream were written."""
    return [
        int(connection.execute(_AT, {"id": line_item, "seq": seq}).scalar_one()) for seq in seqs
    ]


def _price(row: Any) -> int | None:
    if row.kind != "won":
        return None
    price = charting.readable(row.body).get("price")
    return price if isinstance(price, int) else None


_ENTRIES = text(
    "SELECT kind, at_ms, cost, body FROM stream WHERE line_item = :id AND at_ms >= :from"
    " AND seq > (SELECT seq FROM balance WHERE line_item = :id) - :limit ORDER BY seq DESC"
)
_BIDS = text(
    "SELECT at_ms, price, set_by FROM decision WHERE line_item = :id AND price IS NOT NULL"
    " AND test = 0 AND at_ms >= :from ORDER BY at_ms DESC, number DESC LIMIT :limit"
)
_DAY = text("SELECT spent + over_spent FROM local_day WHERE line_item = :id AND day = :day")
_CHECKPOINTS = text(
    "SELECT seq, state, at_ms FROM checkpoint WHERE line_item = :id ORDER BY seq DESC LIMIT :limit"
)
_AT = text("SELECT at_ms FROM stream WHERE line_item = :id AND seq = :seq")
