"""Rows of the append-only stream as values, before they have a number."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any, NamedTuple

Body = Mapping[str, Any]
PAYING = ("won", "billed")  # Kinds of outcome that name a price to be paid.


class Entry(NamedTuple):
    """
    One event of a line item.

    Args:
        kind: lease, retire, close, won, lost, void, billed, value, parked, conflict, tick, …
        body: JSON ready; money in nanos.
        bid: The 16 bytes of the bid it speaks of, if any.
        slot: The place of that bid it fills; a second row in the same place is impossible.
        cost: How much of a clearing price it accepted, in nanos.
    """

    kind: str
    body: Body
    bid: bytes | None = None
    slot: str | None = None
    cost: int = 0


def conflict(bid: bytes, said: Body, cost: int = 0) -> Entry:
    """An entry for other content in a slot that is taken; the same conflict has the same slot."""
    digest = hashlib.sha256(json.dumps(said, sort_keys=True).encode()).hexdigest()[:24]
    return Entry("conflict", said, bid, f"conflict:{digest}", cost)
