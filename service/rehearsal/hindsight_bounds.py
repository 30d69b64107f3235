"""What another way of bidding would have come to on a log, with no model of rivals or values.

Each opportunity is exact where what was told settles it and bounded by the worst and the best
case where not; the sum is an interval that the truth cannot leave (partial identification:
Manski, "Nonparametric bounds on treatment effects", American Economic Review 80(2):319-323,
1990; the table for auctions is our own derivation). One pass, O(1) memory per alternative.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import NamedTuple

from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import NEVER, WON, Logged

EXACT, OPEN, BOUNDED = "exact", "open", "bounded"


class Bound(NamedTuple):
    """
    Limits of what one opportunity would have come to; money in nanos.

    Args:
        kind: EXACT, OPEN (all is known but what the impression may still bring) or BOUNDED.
        low: Least surplus, value less cost.
        high: Most surplus.
        cost_low: Least cost.
        cost_high: Most cost.
        win_low: 1 where it would have won for sure.
        win_high: 1 where it may have won.
    """

    kind: str
    low: int
    high: int
    cost_low: int = 0
    cost_high: int = 0
    win_low: int = 0
    win_high: int = 0


NOTHING = Bound(EXACT, 0, 0)


def bounded(row: Logged, bids: tuple[int, int], unseen: tuple[int, int] | None = None) -> Bound:
    """
    The limits of one opportunity with a bid between two prices.

    Args:
        row: What was told of it.
        bids: The least and the most that would have been bid.
        unseen: What an impression that was not bought is worth; None for what the log says.
    """
    low_bid, high_bid = bids
    if high_bid <= row.loses_to or high_bid <= 0:
        return NOTHING
    # Between the two prices it may go either way, and winning may be worse than losing.
    sure = low_bid >= row.wins_from
    pays_low, pays_high = row.pays(low_bid, high_bid)
    bought = row.result == WON
    worth = (row.low, row.high) if bought or unseen is None else unseen
    low, high = worth[0] - pays_high, worth[1] - pays_low
    if not sure:
        low, high, pays_low = min(0, low), max(0, high), 0
    kind = BOUNDED
    if sure and bought and pays_low == pays_high:
        kind = EXACT if row.low == row.high else OPEN
    return Bound(kind, low, high, pays_low, pays_high, int(sure), 1)


@dataclass(slots=True)
class Purse:
    """
    The money an alternative has, so that one that spends more is known to have stopped.

    Args:
        left: For all days, in nanos.
        daily: For each local day; None for no limit.
    """

    left: int = NEVER
    daily: int | None = None
    days: dict[str, int] = field(default_factory=dict)

    def may_be_out(self, row: Logged, cost_high: int) -> bool:
        """Take the most this may cost; whether the money may have ended before it."""
        if not cost_high:
            return self._out(row.day, 0)
        out = self._out(row.day, cost_high)
        # The dearest course, for money that lasts through that one lasts through all.
        self.left -= cost_high
        self.days[row.day] = self.days.get(row.day, 0) + cost_high
        return out

    def _out(self, day: str, cost: int) -> bool:
        today = self.days.get(day, 0) + cost
        return self.left < cost or (self.daily is not None and today > self.daily)


@dataclass(slots=True)
class Sums:
    """
    The limits of a whole log, added up; money in nanos.

    Args:
        counts: Opportunities by kind of knowledge.
        low: Least surplus in all.
        high: Most surplus in all.
        exact: Surplus of those that are exact.
        cost: Least and most cost.
        wins: Least and most wins.
        cut: Opportunities before which the money may have ended, played or not.
    """

    counts: dict[str, int] = field(default_factory=lambda: {EXACT: 0, OPEN: 0, BOUNDED: 0})
    low: int = 0
    high: int = 0
    exact: int = 0
    cost: tuple[int, int] = (0, 0)
    wins: tuple[int, int] = (0, 0)
    cut: int = 0

    @property
    def auctions(self) -> int:
        """Opportunities that some price could have bought."""
        return sum(self.counts.values())

    @property
    def exact_share(self) -> float | None:
        """The share whose outcome is known for certain; of its value some may be on its way."""
        known = self.counts[EXACT] + self.counts[OPEN]
        return known / self.auctions if self.auctions else None

    def add(self, bound: Bound, *, out: bool = False) -> None:
        """
        Add one opportunity.

        Args:
            bound: Its limits.
            out: Whether the money may have ended before it: then it may also be nothing.
        """
        if out and bound.win_high:
            bound = Bound(
                *(BOUNDED, min(0, bound.low), max(0, bound.high), 0, bound.cost_high, 0, 1)
            )
            self.cut += 1
        self.counts[bound.kind] += 1
        self.low += bound.low
        self.high += bound.high
        self.exact += bound.low if bound.kind == EXACT else 0
        self.cost = self.cost[0] + bound.cost_low, self.cost[1] + bound.cost_high
        self.wins = self.wins[0] + bound.win_low, self.wins[1] + bound.win_high


@dataclass(slots=True)
class Account:
    """One alternative on a log that is read once."""

    alternative: Alternative
    purse: Purse = field(default_factory=Purse)
    sums: Sums = field(default_factory=Sums)

    def take(self, row: Logged, unseen: tuple[int, int] | None = None) -> Bound | None:
        """The next opportunity in order; None where no price could have bought it."""
        if not row.counts:
            return None
        seen = self.alternative.seen(row)
        bound = bounded(seen, self.alternative.bids(row), unseen)
        self.sums.add(bound, out=self.purse.may_be_out(row, bound.cost_high))
        return bound


def summed(
    rows: list[Logged], alternative: Alternative, purse: Purse | None = None,
    unseen: tuple[int, int] | None = None,
) -> Sums:  # fmt: skip
    """A whole log at once, in its order; `unseen` as in `bounded`."""
    account = Account(alternative, purse or Purse())
    for row in rows:
        account.take(row, unseen)
    return account.sums


def shown(sums: Sums) -> Mapping[str, object]:
    """The interval that needs no model, as people read it; money under names in `_nanos`."""
    mean = [round(end / sums.auctions) if sums.auctions else None for end in (sums.low, sums.high)]
    return {
        "auctions": sums.auctions,
        "exact": {
            "auctions": sums.counts[EXACT] + sums.counts[OPEN],
            "share": sums.exact_share,
            "of_which_value_still_open": sums.counts[OPEN],
            "surplus_nanos": sums.exact,
        },
        "bounded": {"auctions": sums.counts[BOUNDED]},
        "surplus": {"low_nanos": sums.low, "high_nanos": sums.high},
        "surplus_per_auction": {"low_cpm_nanos": mean[0], "high_cpm_nanos": mean[1]},
        "spent": {"low_nanos": sums.cost[0], "high_nanos": sums.cost[1]},
        "wins": {"low": sums.wins[0], "high": sums.wins[1]},
    }
