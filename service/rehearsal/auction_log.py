"""One line of an auction log as hindsight reads it, apart from where it is kept.

What was told of an auction is put in two prices: every bid from one on wins for sure, every bid
up to the other loses for sure. All that hindsight knows without a model follows from them.
"""

from __future__ import annotations

from dataclasses import dataclass

from service.decision.rule import FIRST, FIXED

NEVER = 2**62  # A price that no bid reaches.
WON, LOST, VOID, SILENT, PASSED = "won", "lost", "void", "silent", "passed"
UNDER_FLOOR, OUTBID = "under_floor", "outbid_inside"
# No price would have changed these; and these hang on money, which another price changes.
SHUT = frozenset({"frozen", "out_of_flight", "past_deadline", "overloaded"})
MONEY = frozenset({"budget_spent", "day_spent", "budget_held"})


@dataclass(frozen=True, slots=True)
class Logged:
    """
    One opportunity and what is known to have come of it; money in nanos, fees included.

    Args:
        auction: "second", "first" or "fixed".
        bid: What was bid; 0 where nothing was.
        result: WON, LOST, VOID, PASSED, or SILENT where no word of a bid has come.
        floor: Least price the seller took; the price itself of a fixed one.
        price: What was paid for a win.
        price_low: The least it may have cost, where that is not known.
        least: The least bid that would have won, where the source told it.
        low: Least the impression may bring, as far as is known.
        high: Most it may bring; equal to `low` once its value is known.
        reason: Why it passed.
        set_by: What set the bid.
        arm: Which rule of a control share bid.
        arm_odds: The chance that it was this one; None where nobody chose, or nobody kept it.
        odds: The chance of just this price, or of one under the floor; None where prices were
            not drawn, or the chance was not kept.
    """

    auction: str
    bid: int
    result: str
    high: int
    low: int = 0
    floor: int = 0
    price: int = 0
    price_low: int | None = None
    least: int | None = None
    source: str = "default"
    reason: str = ""
    set_by: str = ""
    at_ms: int = 0
    day: str = ""
    arm: str = ""
    arm_odds: float | None = None
    odds: float | None = None

    @property
    def counts(self) -> bool:
        """Whether some price could have bought it."""
        return self.reason not in SHUT

    @property
    def open(self) -> bool:
        """Whether it was bought and may still bring something."""
        return self.result == WON and self.low < self.high

    @property
    def wins_from(self) -> int:
        """Every bid from here on wins for sure."""
        if self.auction == FIXED:
            return self.price if self.result == WON else NEVER
        if self.result == WON:
            return self._told if self._told is not None else self.bid
        return self.least if self.result == LOST and self.least is not None else NEVER

    @property
    def loses_to(self) -> int:
        """Every bid up to here loses for sure."""
        if self.result == VOID or (self.result == LOST and self.auction == FIXED):
            return NEVER
        if self.result == LOST:
            return max(self.bid, (self.least or 0) - 1)
        told = self._told if self.result == WON else None
        return max(self.floor, told or 0) - 1

    def pays(self, bid_low: int, bid_high: int) -> tuple[int, int]:
        """The least and the most that a win costs with a bid in this range."""
        if self.auction == FIXED:
            price = self.price if self.result == WON else self.floor
            return price, price
        if self.auction == FIRST:
            return max(bid_low, self.loses_to + 1), bid_high
        if self.result == WON:
            return self.price if self.price_low is None else self.price_low, self.price
        if self.least is not None:
            return self.least, self.least
        return max(self.loses_to, self.floor), bid_high

    @property
    def _told(self) -> int | None:
        """The least winning bid of a win, where the auction tells it."""
        if self.least is not None:
            return min(self.least, self.bid)
        if self.auction == FIRST:
            return None
        # The floor itself is enough; a tie with a rival counts as lost, for nobody says who wins.
        above = self.price + (self.auction != FIXED and self.price != self.floor)
        return min(above, self.bid)
