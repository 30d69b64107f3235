"""What one bid has cost so far, read from its stream; apart because only refunds ask."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store.database import Writing

REVERSAL = "reversal"


@dataclass(frozen=True, slots=True)
class Cost:
    """
    The cost of a bid in nanos, and what was taken back of it, if anything was.

    Args:
        slice: Hex of its slice, when that was known to this database.
        day: The local day it was spent on.
    """

    booked: int
    reversed: int | None
    slice: str | None
    day: str | None


def cost_of(connection: Writing, line_item: str, bid: bytes) -> Cost | None:
    """What this bid has cost; None when this line item has booked nothing for it."""
    rows = connection.execute(_OF_BID, {"id": line_item, "bid": bid}).all()
    paid = [row for row in rows if row.kind != REVERSAL and row.cost]
    if not paid:
        return None
    place: dict[str, Any] = json.loads(paid[0].body)
    taken = [row.cost for row in rows if row.kind == REVERSAL]
    return Cost(
        sum(row.cost for row in paid),
        taken[0] if taken else None,
        place.get("slice"),
        place.get("day"),
    )


_OF_BID = text(
    "SELECT kind, cost, body FROM stream WHERE line_item = :id AND bid = :bid ORDER BY seq"
)
