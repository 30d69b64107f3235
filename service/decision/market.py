"""What may be offered where one pays what one bids, worked out once per snapshot and source.

Apart from the rule, which asks here at bid time, and from the estimators, which know no cap.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np

from service.decision.terms import Terms
from service.learner.arrays import Numbers, double
from service.learner.curve_counts import ABOVE, BELOW, LOST, SEEN, WON, Counts, Feed
from service.learner.market_part import NAME
from service.learner.market_state import POOLED, MarketState, joined, read
from service.learner.memory import Memory
from service.learner.offers import offers
from service.learner.rules import MarketRules

# Estimates of mixed news cost the cube of the ticks, so there are fewer; all else is as fine as
# it was counted.
CELLS_MIXED = 100
TRIED_LEAST, TRIED_MOST = 25, 200
TRIED_BELOW_VALUE = 16


@dataclass(frozen=True, slots=True)
class Menu:
    """Bids in nanos, ascending, each with a better chance to win than the one before."""

    price: Numbers
    chance: Numbers

    def best(self, value: float, floor: int, cap: int) -> int | None:
        """
        The bid that maximises (v - b) F(b) from the floor to the cap, of equals the lowest.

        Looking at all bids takes a few microseconds, as the product may have several tops. None
        if no bid of the menu lies below the value; the floor is on it, with the chance of the
        bid below it.
        """
        start = int(np.searchsorted(self.price, floor, "right"))
        end = int(np.searchsorted(self.price, min(value, np.nextafter(float(cap), np.inf))))
        price, chance = self.price[start:end], self.chance[start:end]
        if 0 < floor < value and floor <= cap and start:
            price, chance = np.append(floor, price), np.append(self.chance[start - 1], chance)
        if not price.size:
            return None
        earned = (value - price) * chance
        best = int(np.argmax(earned))
        return int(price[best]) if earned[best] > 0.0 else None


@dataclass(frozen=True, slots=True)
class Market:
    """
    Menus by source, for first-price auctions.

    Args:
        menus: Of the sources that have told something; the pool's under the empty name.
        unknown: What is tried where nothing is known.
    """

    menus: dict[str, Menu] = field(default_factory=dict)
    unknown: Menu | None = None

    def first_price(self, value: float, source: str, floor: int, cap: int) -> int:
        """
        The bid for a value at a source, in nanos.

        Where the menu has nothing below the value, half of it: the best reply to one rival whose
        bid is uniform from 0 on (Krishna, "Auction Theory"), or the floor above that.
        """
        menu = self.menus.get(source) or self.menus.get(POOLED) or self.unknown
        bid = menu.best(value, floor, cap) if menu else None
        if bid is None:
            half = min(int(value / 2.0), cap)
            # A floor above half the value is still worth its price, up to the value.
            bid = max(half, min(floor, cap)) if floor < value else half
        return bid


UNTOLD = Market()


def market_of(memory: Memory, terms: Terms, value: float) -> Market:
    """
    Make ready what a memory knows of first-price auctions.

    Args:
        value: What a bid is made for now, in nanos: it says how finely to try.
    """
    counted = state_of(memory, terms, first_only=True)
    tried = _tried(counted.top, value)
    menus = {
        source: _menu(counted.counts((auction, source)), tried)
        for auction, source in counted.sources
    }
    return Market(menus, _untold(counted.top, tried))


def state_of(memory: Memory, terms: Terms, first_only: bool = False) -> MarketState:
    """
    The counts of a memory, perhaps of first-price auctions only; empty ones where it has none.

    Raises:
        UnreadableMarket: They are damaged.
    """
    part = memory.part(NAME)
    return (
        read(part, first_only) if part else MarketState(MarketRules.of(terms.cap, priced=False).top)
    )


def drawable(counts: Counts) -> Counts:
    """The counts on ticks that a curve can be drawn through while a snapshot is made ready."""
    bare = any(row[WON] or row[LOST] for _, row in counts.rows)
    both_sides = all(any(row[which] for _, row in counts.rows) for which in (ABOVE, BELOW))
    return joined(counts, CELLS_MIXED) if both_sides or (bare and _priced(counts)) else counts


def _priced(counts: Counts) -> bool:
    return any(row[which] for _, row in counts.rows for which in (SEEN, ABOVE, BELOW))


def _menu(counts: Counts, tried: int) -> Menu:
    counts = drawable(counts)
    feed: Feed = "always" if _priced(counts) else "never"
    price, chance = offers(counts, feed, min(tried, counts.ticks.cells))
    # A higher bid that wins no more often is never better, and 0 is no bid.
    before = np.maximum.accumulate(np.append(0.0, chance[:-1]))
    useful = (chance > before) & (price > 0.0)
    return Menu(double(price[useful]), double(chance[useful]))


@lru_cache(maxsize=256)
def _untold(top: int, tried: int) -> Menu:
    return _menu(Counts(MarketState(top).ticks), tried)


def _tried(top: int, value: float) -> int:
    """Twice as many bids as often as it takes to have some below the value: old ones stay."""
    tried = TRIED_LEAST
    while tried < TRIED_MOST and value * tried < TRIED_BELOW_VALUE * top:
        tried *= 2
    return tried
