"""First-price auctions of which everything is known, replayed by learners and by hindsight."""

from __future__ import annotations

from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from service.learner import curve_counts
from service.learner.arrays import double
from service.learner.curve_counts import Counts, Feed
from service.learner.offers import first_price
from service.learner.partition import Ticks
from service.rehearsal.telling import outcomes

Nanos = NDArray[np.int64]
Scale = Literal["price", "share"]

EPOCH = 25  # Auctions between two looks at what was learnt.
WHOLE = 1_000_000  # One whole value, where bids are learnt as shares of it.
SHARES = 100


class Result(NamedTuple):
    """Sums over all auctions, in nanos; wins as a count."""

    surplus: int
    wins: int
    paid: int


def replay(competing: Nanos, values: Nanos, feed: Feed, scale: Scale, ticks: Ticks) -> Result:
    """
    Bid by what was learnt from the auctions before.

    Args:
        competing: The highest competing bid of each auction, in order.
        values: What each is worth to us, known before we bid.
        feed: What is told.
        scale: Learn the curve of competing bids, or of their shares of our value; the second
            holds where both rise and fall together with the goods.
        ticks: Prices to bid at, for the first.
    """
    own = ticks if scale == "price" else Ticks(WHOLE, WHOLE // SHARES)
    counts, bids = Counts(own), np.zeros_like(values)
    for start in range(0, len(values), EPOCH):
        part = slice(start, start + EPOCH)
        worth, against = values[part], competing[part]
        asked = worth if scale == "price" else np.full_like(worth, WHOLE)
        offered = first_price(counts, feed, double(asked)).astype(np.int64)
        # Rounded up, as a share just below it would not have won.
        told = against if scale == "price" else -(-against * WHOLE // np.maximum(worth, 1))
        counts = curve_counts.add(counts, outcomes(offered, told, feed))
        bids[part] = offered if scale == "price" else offered * worth // WHOLE
    return earned(competing, values, bids)


def earned(competing: Nanos, values: Nanos, bids: Nanos) -> Result:
    """What bids would have brought."""
    won = competing <= bids
    paid = int(bids[won].sum())
    return Result(int(values[won].sum()) - paid, int(won.sum()), paid)


def best_fixed_share(competing: Nanos, values: Nanos) -> tuple[float, Result]:
    """The share of the value that would have earned most, of 1 % to 100 %, and what it earns."""
    shares = np.arange(1, SHARES + 1)
    results = [earned(competing, values, values * share // SHARES) for share in shares.tolist()]
    at = int(np.argmax([result.surplus for result in results]))
    return float(shares[at]) / SHARES, results[at]
