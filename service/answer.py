"""What is answered to an opportunity and how the log tells of it, apart from how it came about."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, NamedTuple

from service.choosing import NOTHING, Draw
from service.decision.opportunity import Opportunity
from service.decision.rule import Sale


class Answer(NamedTuple):
    """
    A bid (nanos per impression, with its ticket) or a pass with its reason.

    Args:
        held: The bid with its fees, and so its hold.
        draw: Which rule answered, and with what chances; None where none was asked.
        currency: Of the bid; empty where it is the line item's own.
        sale: What was for sale, with its fees; None where nobody looked.
    """

    request_id: str | None
    line_item: str
    bid: int | None
    reason: str | None
    ticket: str | None = None
    ref: str | None = None
    method: str | None = None
    set_by: str | None = None
    snapshot: int | None = None
    held: int | None = None
    draw: Draw | None = None
    currency: str = ""
    sale: Sale | None = None


@dataclass(frozen=True, slots=True)
class Clocks:
    """
    How long a request may take at most, in milliseconds, and how many may wait at once.

    Args:
        lag_s: How late requests are seen now, in seconds.
    """

    deadline_ms: int
    deadline_ms_max: int
    waiting_max: int = 200
    lag_s: Callable[[], float] = float


def decision(
    answer: Answer, opportunity: Opportunity, sale: Sale | None, wall_ms: int
) -> dict[str, Any]:
    """The row of the decision log that tells of an answer."""
    arm, arm_odds, odds = answer.draw or NOTHING
    return {
        "auction": (opportunity.auction or "") if sale is None else sale.auction,
        "floor_held": None if sale is None else sale.floor,
        "arm": arm,
        "held": answer.held,
        "arm_odds": arm_odds,
        "odds": odds,
        "at_ms": wall_ms,
        "line_item": answer.line_item,
        "ref": answer.ref,
        "request_id": answer.request_id,
        "source": opportunity.source,
        "floor": opportunity.floor,
        "price": answer.bid,
        "reason": answer.reason,
        "set_by": answer.set_by,
        # A pass before any snapshot was read comes from none; the column takes no null.
        "snapshot": answer.snapshot or 0,
        "test": int(opportunity.test),
    }
