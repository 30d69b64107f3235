"""Outcomes and values on their way into the books, and what became of them.

Apart from the transaction that books them, since whoever reads tickets makes them.
"""

from __future__ import annotations

from typing import NamedTuple

from service.ledger.settle import Outcome
from service.ledger.values import Value

NO_SNAPSHOT = -1  # Of a price made before the database was restored.


class Booking(NamedTuple):
    """
    One outcome or value with the place its ticket names.

    Args:
        slice_id: None when the ticket is of another incarnation of the database.
        day: The local day its money belongs to.
        snapshot: The learner's state that the price was made from, and so its law, if any.
        floor: Least price the seller took, in nanos per impression.
        features: What was known of the impression, hashed.
        hint: What the caller predicted of its value, in nanos.
        arm: Which rule bid, where there is a control share.
    """

    line_item: str
    event: Outcome | Value
    slice_id: bytes | None = None
    day: str | None = None
    snapshot: int = 0
    floor: int = 0
    features: bytes = b""
    hint: int | None = None
    arm: str = ""


class Booked(NamedTuple):
    """What became of one booking."""

    status: str
    code: str | None = None
    clipped: bool = False
