"""Other ways to have bid, apart from what would have come of them: each opportunity's bid.

An alternative says between which two prices its bid would have lain; where that hangs on what
nobody logged, the two lie apart. Prices in nanos per impression, fees included.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

from service.decision.rule import FIRST, FIXED
from service.rehearsal.auction_log import MONEY, NEVER, OUTBID, UNDER_FLOOR, WON, Logged

BY_CAP = "cap"
Kind = Literal["as_it_was", "flat", "cap", "floor", "method"]
SAYS: dict[Kind, str] = {
    "as_it_was": "the bids that were made",
    "flat": "one price for every opportunity",
    "cap": "the bids that were made, cut at the other cap; what would have been learnt or paced "
    "otherwise under it is not in it",
    "floor": "the bids that were made, had every seller's floor been this one and rivals bid "
    "alike; what would have been learnt or paced otherwise is not in it",
    "method": "any bid at all up to the cap, since what another method would have bid hangs on "
    "outcomes that nobody saw",
}


@dataclass(frozen=True, slots=True)
class Alternative:
    """
    What else might have been done.

    Args:
        kind: Which of its terms differ.
        price: The flat price, cap or floor; nothing for another method.
        cap: The cap of the line item.
    """

    kind: Kind
    price: int = 0
    cap: int = NEVER

    def seen(self, row: Logged) -> Logged:
        """The opportunity as it would have been for sale."""
        if self.kind != "floor" or row.auction == FIXED:
            return row
        other = replace(row, floor=self.price)
        if row.auction == FIRST or row.result != WON:
            return other
        if row.price == row.floor > self.price:
            # Nobody was told how far below the floor the rivals stayed.
            return replace(other, price_low=self.price)
        # A raised floor is paid where no rival bid more; below it nothing is sold.
        least = max(row.wins_from, self.price)
        return replace(other, price=max(row.price, self.price), least=least)

    def bids(self, row: Logged) -> tuple[int, int]:
        """The least and the most that would have been bid; 0 and 0 for a pass."""
        if not row.counts:
            return 0, 0
        if self.kind == "method":
            return 0, self.cap
        if self.kind == "flat":
            unsure = row.reason in MONEY or row.reason == OUTBID
            return 0 if unsure else self.price, self.price
        if self.kind == "cap":
            return self._capped(row)
        if self.kind == "floor" and row.reason in MONEY:
            return 0, self.cap
        if self.kind == "floor" and row.reason == UNDER_FLOOR and self.price < row.floor:
            return 0, row.floor - 1
        return row.bid, row.bid

    def _capped(self, row: Logged) -> tuple[int, int]:
        raised = self.price > self.cap
        if row.reason in MONEY or (row.reason == OUTBID and raised):
            return 0, self.price
        if row.reason == UNDER_FLOOR:
            # It was below the floor, cut at a cap or not: only a higher cap can matter.
            return 0, self.price if raised and self.price >= row.floor else 0
        if row.bid <= self.price:
            return row.bid, self.price if row.set_by == BY_CAP else row.bid
        # Shading looks for the best price below the cap, which need not be the cap.
        return (0 if row.auction == FIRST else self.price), self.price
