"""The best fixed bid in hindsight, which needs what nobody sees while bidding: every
competing bid and every value of the sequence."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from service.rehearsal.market import Nanos


@dataclass(frozen=True, slots=True)
class FixedBid:
    """A bid for every opportunity of a sequence, and what it would have earned, in nanos."""

    bid: int
    surplus: int


def best_fixed_bid(
    competing: ArrayLike, values: ArrayLike, cap: int | None = None, budget: int | None = None
) -> FixedBid:
    """
    The one bid that would have earned most in second price, against which regret is counted.

    Sorted by competing bid, the surplus of a bid is a prefix sum of value - competing bid
    (the benchmark of Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT
    2016). Not bidding, which earns nothing, is bid 0. Under a budget the opportunities come
    in their order, and bidding ends before the first win whose price is no longer there. That
    is kinder than a hold of the whole bid, and keeps a bid from earning by what it freezes.
    Each bid that meets that end costs one more pass over the sequence.

    Args:
        competing: Least bid that wins, per opportunity in order, in nanos.
        values: Value if won, in nanos.
        cap: Largest bid looked at; None for no limit.
        budget: Money at the start; None for no limit.
    """
    rivals, worth = np.asarray(competing, dtype=np.int64), np.asarray(values, dtype=np.int64)
    bids, surpluses, spent = _by_bid(rivals, worth)
    allowed = slice(None) if cap is None else bids <= cap
    best = FixedBid(0, 0)
    for bid, surplus, cost in zip(
        bids[allowed].tolist(), surpluses[allowed].tolist(), spent[allowed].tolist(), strict=True
    ):
        if budget is not None and cost > budget:
            surplus = _within(rivals, worth, bid, budget)
        if surplus > best.surplus:
            best = FixedBid(bid, surplus)
    return best


def surplus_of(competing: ArrayLike, values: ArrayLike, bid: int) -> int:
    """What one bid for every opportunity earns without a budget, in nanos."""
    rivals, worth = np.asarray(competing, dtype=np.int64), np.asarray(values, dtype=np.int64)
    return int((worth - rivals)[rivals <= bid].sum())


def _by_bid(rivals: Nanos, worth: Nanos) -> tuple[Nanos, Nanos, Nanos]:
    order = np.argsort(rivals, kind="stable")
    bids = rivals[order]
    # Of equal competing bids only the last prefix can be won.
    last = np.append(bids[1:] != bids[:-1], True)[: bids.size]
    surpluses = np.cumsum(worth[order] - bids)
    return bids[last], surpluses[last], np.cumsum(bids)[last]


def _within(rivals: Nanos, worth: Nanos, bid: int, budget: int) -> int:
    won = np.flatnonzero(rivals <= bid)
    paid = won[np.cumsum(rivals[won]) <= budget]
    return int((worth[paid] - rivals[paid]).sum())
