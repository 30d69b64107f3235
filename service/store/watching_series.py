"""Named reads behind the charts of a line item: the newest rows, so ten million cost no more."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store.database import Reading

ENTRIES_MAX = 10_000
DECISIONS_MAX = 5000
DELAYS_MAX = 5000
CHECKPOINTS_MAX = 16
OUTCOMES = ("won", "billed", "conflict", "lost")


@dataclass(frozen=True, slots=True)
class Series:
    """
    What charts are drawn of, oldest first; money in nanos, moments in wall clock ms.

    Args:
        bids: When, at what price, and whether the cap set it.
        costs: When and how much was booked as spent.
        clearing: When and at what price per impression an auction was won.
        delays_ms: From a win to each of its values.
        day_spent: Booked on the local day so far, also by entries that are not among `costs`.
        whole: Whether `costs` and `clearing` go back to the first entry of the stream.
    """

    wall_ms: int
    bids: list[tuple[int, int, bool]]
    costs: list[tuple[int, int]]
    clearing: list[tuple[int, int]]
    delays_ms: list[int]
    day_spent: int
    whole: bool


def series(connection: Reading, line_item: str, wall_ms: int, day: str) -> Series:
    """Read it all, in four queries."""
    entries = list(connection.execute(_ENTRIES, {"id": line_item, "limit": ENTRIES_MAX}))
    decided = list(connection.execute(_BIDS, {"id": line_item, "limit": DECISIONS_MAX}))
    delays = connection.execute(_DELAYS, {"id": line_item, "limit": DELAYS_MAX}).scalars().all()
    spent = connection.execute(_DAY, {"id": line_item, "day": day}).scalar_one_or_none()
    entries.reverse()
    decided.reverse()
    return Series(
        wall_ms,
        [(int(row.at_ms), int(row.price), row.set_by == "cap") for row in decided],
        [(int(row.at_ms), int(row.cost)) for row in entries if row.cost],
        [(int(row.at_ms), price) for row in entries if (price := _price(row)) is not None],
        [max(0, int(delay)) for delay in delays],
        int(spent or 0),
        len(entries) < ENTRIES_MAX,
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
    price = json.loads(row.body).get("price")
    return price if isinstance(price, int) else None


_ENTRIES = text(
    "SELECT kind, at_ms, cost, body FROM stream WHERE line_item = :id"
    " AND seq > (SELECT seq FROM balance WHERE line_item = :id) - :limit ORDER BY seq DESC"
)
_BIDS = text(
    "SELECT at_ms, price, set_by FROM decision WHERE line_item = :id AND price IS NOT NULL"
    " AND test = 0 ORDER BY at_ms DESC, number DESC LIMIT :limit"
)
_DELAYS = text(
    "SELECT v.at_ms - w.at_ms AS delay FROM stream v JOIN stream w ON w.bid = v.bid"
    " AND w.slot = 'result' WHERE v.line_item = :id AND v.kind = 'value'"
    " AND v.seq > (SELECT seq FROM balance WHERE line_item = :id) - 10000"
    " ORDER BY v.seq DESC LIMIT :limit"
)
_DAY = text("SELECT spent + over_spent FROM local_day WHERE line_item = :id AND day = :day")
_CHECKPOINTS = text(
    "SELECT seq, state, at_ms FROM checkpoint WHERE line_item = :id ORDER BY seq DESC LIMIT :limit"
)
_AT = text("SELECT at_ms FROM stream WHERE line_item = :id AND seq = :seq")
