"""The best fixed bid in hindsight, which needs what nobody sees while bidding: every
competing bid and every value of the sequence."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from service.rehearsal.market import Nanos


@dataclass(frozen=True, slots=True)
class FixedBid:
    """A bid for every opportunity of a sequence, and what it would have earned, in nanos."""

    bid: int
    surplus: int


def best_fixed_bid(
    competing: ArrayLike,
    values: ArrayLike,
    cap: int | None = None,
    budget: int | None = None,
    *,
    pays_own: bool = False,
    tried_max: int | None = None,
) -> FixedBid:
    """
    The one bid that would have earned most, against which regret is counted.

    Sorted by competing bid, the surplus of a bid in second price is a prefix sum of value -
    competing bid (the benchmark of Weed, Perchet, Rigollet, "Online learning in repeated
    auctions", COLT 2016); in first price it is that of the values less the bid for each win. Not
    bidding, which earns nothing, is bid 0. Under a budget the opportunities come in their order,
    and bidding ends before the first win whose price is no longer there. That is kinder than a
    hold of the whole bid, and keeps a bid from earning by what it freezes. Each bid that meets
    that end costs one more pass over the sequence.

    Args:
        competing: Least bid that wins, per opportunity in order, in nanos.
        values: Value if won, in nanos.
        cap: Largest bid looked at; None for no limit.
        budget: Money at the start; None for no limit.
        pays_own: Whether a win pays its own bid, as in first price.
        tried_max: Of bids that the budget ends, look at so many, evenly by rank; None for all.
    """
    rivals, worth = np.asarray(competing, dtype=np.int64), np.asarray(values, dtype=np.int64)
    bids, surpluses, spent = _by_bid(rivals, worth, pays_own)
    if cap is not None:
        bids, surpluses, spent = (one[bids <= cap] for one in (bids, surpluses, spent))
    ended = np.flatnonzero(spent > budget) if budget is not None else np.zeros(0, np.intp)
    if ended.size:
        # What the budget ends earns another sum, or none that is known.
        surpluses[ended] = 0
    if budget is not None and ended.size:
        looked = (
            ended if tried_max is None or ended.size <= tried_max else _evenly(ended, tried_max)
        )
        for place in looked.tolist():
            price = np.full_like(rivals, bids[place]) if pays_own else rivals
            surpluses[place] = _within(rivals, worth, price, int(bids[place]), budget)
    best = int(np.argmax(surpluses)) if surpluses.size else 0
    if not surpluses.size or surpluses[best] <= 0:
        return FixedBid(0, 0)
    return FixedBid(int(bids[best]), int(surpluses[best]))


def surplus_of(competing: ArrayLike, values: ArrayLike, bid: int) -> int:
    """What one bid for every opportunity earns without a budget, in nanos."""
    rivals, worth = np.asarray(competing, dtype=np.int64), np.asarray(values, dtype=np.int64)
    return int((worth - rivals)[rivals <= bid].sum())


def _by_bid(rivals: Nanos, worth: Nanos, pays_own: bool) -> tuple[Nanos, Nanos, Nanos]:
    order = np.argsort(rivals, kind="stable")
    bids = rivals[order]
    # Of equal competing bids only the last prefix can be won.
    last = np.append(bids[1:] != bids[:-1], True)[: bids.size]
    spent = bids * np.arange(1, bids.size + 1) if pays_own else np.cumsum(bids)
    return bids[last], (np.cumsum(worth[order]) - spent)[last], spent[last]


def _evenly(places: NDArray[np.intp], count: int) -> NDArray[np.intp]:
    return places[np.linspace(0, places.size - 1, count).astype(np.intp)]


def _within(rivals: Nanos, worth: Nanos, price: Nanos, bid: int, budget: int) -> int:
    won = np.flatnonzero(rivals <= bid)
    paid = won[np.cumsum(price[won]) <= budget]
    return int((worth[paid] - price[paid]).sum())
