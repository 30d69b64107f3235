"""Several bidders that learn against each other, apart from markets that stay as they are.

Each has one value per auction, known to it before it bids, and learns only what it could win
against, with the counts and curves the service uses. No theorem says that such learners settle.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.learner import curve_counts, shading
from service.learner.arrays import Numbers, double
from service.learner.curve_counts import KEPT_WHOLE, Counts, Feed
from service.learner.offers import TRIED, first_price
from service.learner.partition import Ticks
from service.rehearsal.telling import outcomes

Nanos = NDArray[np.int64]
Format = Literal["first", "second"]

VALUE_TOP = 1_000_000  # The largest value in nanos; values are uniform from 0 to it.
TICK = 10_000


@dataclass(frozen=True, slots=True)
class Play:
    """What every auction brought; money in nanos, one row per auction, one column per bidder."""

    values: Nanos
    bids: Nanos
    paid: Nanos


@dataclass(frozen=True, slots=True)
class Arena:
    """
    The rules of a rehearsal.

    Args:
        bidders: How many there are.
        format: "first": the winner pays its bid; "second": the highest other bid.
        feed: When a bidder is told the highest other bid.
        epoch: Auctions between two looks at what was learnt.
        kept: What is kept of every count at each look, in parts of 2^32.
        grid: How many bids are tried where only win and loss are told.
    """

    bidders: int
    format: Format = "first"
    feed: Feed = "always"
    epoch: int = 200
    # The others learn too, so what they did long ago says little of what they do now.
    kept: int = KEPT_WHOLE * 95 // 100
    grid: int = TRIED

    def play(self, rng: Generator, auctions: int) -> Play:
        """Play so many auctions, rounded down to whole epochs."""
        learnt = [Counts(Ticks(VALUE_TOP, TICK)) for _ in range(self.bidders)]
        played = []
        for _ in range(auctions // self.epoch):
            values = rng.integers(0, VALUE_TOP, (self.epoch, self.bidders), endpoint=True)
            bids = self._bids(learnt, values)
            least = _least_to_win(bids, rng)
            played.append((values, bids, self._paid(bids, least)))
            for bidder, counts in enumerate(learnt):
                told = outcomes(bids[:, bidder], least[:, bidder], self.feed)
                # Between two looks, so that what is new counts in full.
                kept = curve_counts.discount(counts, self.kept)
                learnt[bidder] = curve_counts.add(kept, told)
        return Play(*(np.concatenate(parts) for parts in zip(*played, strict=True)))

    def _bids(self, learnt: list[Counts], values: Nanos) -> Nanos:
        if self.format == "second":
            # In second price one's value is the best bid whatever the others do.
            return values
        columns = zip(learnt, values.T, strict=True)
        bids = [first_price(one, self.feed, double(of), self.grid) for one, of in columns]
        return np.stack(bids, axis=1).astype(np.int64)

    def _paid(self, bids: Nanos, least: Nanos) -> Nanos:
        price = bids if self.format == "first" else np.sort(bids, axis=1)[:, [-2]]
        return np.where(least <= bids, price, 0)


def _least_to_win(bids: Nanos, rng: Generator) -> Nanos:
    # Equal bids are settled by lot; for whoever comes later in it a nano more would have won.
    lot = rng.permuted(np.tile(np.arange(bids.shape[1]), (len(bids), 1)), axis=1)
    least = np.zeros_like(bids)
    for bidder in range(bids.shape[1]):
        others = np.delete(np.arange(bids.shape[1]), bidder)
        ahead = lot[:, others] < lot[:, [bidder]]
        least[:, bidder] = (bids[:, others] + ahead).max(axis=1)
    return least


def settled(play: Play, bidders: int, from_share: float = 0.5) -> tuple[float, Numbers, float]:
    """
    How the later auctions compare with the equilibrium of uniform values.

    Returns:
        The sum of bids over that of v (n - 1) / n; the same in the four quarters of the values;
        and the mean revenue over (n - 1) / (n + 1).
    """
    start = int(len(play.values) * from_share)
    values, bids, paid = play.values[start:], play.bids[start:], play.paid[start:]
    wished = shading.power_bid(values, bidders)
    quarter = np.minimum(4 * values // VALUE_TOP, 3)
    ratios = [bids[quarter == q].sum() / wished[quarter == q].sum() for q in range(4)]
    revenue = paid.sum(axis=1).mean() / VALUE_TOP / float(shading.equilibrium_revenue(bidders))
    return float(bids.sum() / wished.sum()), double(ratios), float(revenue)
