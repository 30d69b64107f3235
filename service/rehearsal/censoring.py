"""How far censored curves are from the full one on auctions of which everything is known."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.learner import curve_counts
from service.learner.curve import Curve, curve
from service.learner.curve_counts import Counts, Feed
from service.learner.partition import Ticks
from service.rehearsal.telling import outcomes

Nanos = NDArray[np.int64]

FEEDS: dict[str, tuple[Feed, ...]] = {
    "always": ("always",),
    "on_win": ("on_win",),
    "on_loss": ("on_loss",),
    "never": ("never",),
    "mixed": ("on_win", "on_loss", "never"),
}


@dataclass(frozen=True, slots=True)
class Distance:
    """
    One curve from part of the auctions against the full empirical one.

    Args:
        auctions: How many were looked at.
        largest: The largest difference of the two where the curve says something.
        identified: The share of the prices of which it says something.
        covered: The share of those whose interval at 95 % holds the full curve.
    """

    auctions: int
    largest: float
    identified: float
    covered: float


def full(competing: Nanos, ticks: Ticks) -> Curve:
    """The empirical curve of all competing bids."""
    # As if we had bid the top each time, since only then every competing bid is seen.
    top = np.full_like(competing, ticks.top)
    return curve(curve_counts.add(Counts(ticks), outcomes(top, competing, "always")))


def distance(competing: Nanos, bids: Nanos, feeds: tuple[Feed, ...], truth: Curve) -> Distance:
    """
    Estimate from these auctions and compare.

    Args:
        competing: The highest competing bid of each auction.
        bids: What we would have bid.
        feeds: What their sources tell, in turn.
        truth: The full curve, on whose prices the estimate stands.
    """
    ticks = Ticks(int(truth.price[-1]), int(truth.price[1]))
    counts = Counts(ticks)
    for turn, feed in enumerate(feeds):
        own = slice(turn, None, len(feeds))
        counts = curve_counts.add(counts, outcomes(bids[own], competing[own], feed))
    one = curve(counts)
    known = one.identified
    error = np.abs(one.share - truth.share)[known]
    holds = (one.low <= truth.share) & (truth.share <= one.high)
    largest = float(error.max()) if error.size else float("nan")
    return Distance(len(competing), largest, float(known.mean()), float(holds[known].mean()))


def foreign_bids(values: Nanos, ticks: Ticks, rng: Generator) -> Nanos:
    """Bids like our own but each from another auction, on ticks: independent of who competes."""
    mixed = np.minimum(rng.permutation(values), ticks.top)
    return own_bids(mixed, ticks)


def own_bids(values: Nanos, ticks: Ticks) -> Nanos:
    """Our own bids on ticks, of the same auctions: where goods differ they follow who competes."""
    places = np.maximum(np.minimum(values, ticks.top) // ticks.tick, 1)
    return np.asarray(places * ticks.tick, dtype=np.int64)
