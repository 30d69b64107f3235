"""The bids worth thinking of and their chances, by what a feed tells, apart from choosing one."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from service.learner import curve_counts, shading
from service.learner.arrays import Numbers
from service.learner.curve import curve
from service.learner.curve_counts import LOST, WON, Counts, Feed

TRIED = 20  # Bids among which is tried what nothing is known of, unless somebody says otherwise.


class Offers(NamedTuple):
    """Bids in nanos, ascending, and the chance of each to win, hopeful where nothing is known."""

    price: Numbers
    chance: Numbers


def offers(counts: Counts, feed: Feed, tried: int = TRIED) -> Offers:
    """
    What `shading.best` needs.

    A feed with prices shows what other bids would have done, so its curve is taken as it is and
    hope is needed only where it says nothing: above the highest bid made, or below the lowest.
    There a few bids are hoped for, as one bid high shows all that is below it, and a step of one
    tick at a time would take as many looks as there are ticks. Win and loss alone show one bid
    at a time, so few are tried, each with its upper end. No theorem covers the first of these.

    Args:
        counts: What auctions of this source told; round t is one more than they are.
        feed: What the source tells.
        tried: How many bids are hoped for where nothing is known.
    """
    prices = curve_counts.prices(counts.ticks)
    rounds = counts.auctions + 1.0
    at = shading.exploring_places(counts.ticks.cells, tried)
    if feed == "never":
        wins, losses = (counts.column(which)[at] for which in (WON, LOST))
        return Offers(prices[at], shading.rising_upper(wins, wins + losses, rounds))
    one, hope = curve(counts, shading.level_at(rounds)), np.zeros(prices.size)
    hope[at] = one.high[at]
    return Offers(prices, np.where(one.identified, one.share, hope))


def first_price(counts: Counts, feed: Feed, values: Numbers, tried: int = TRIED) -> Numbers:
    """The bid in nanos for each value, also in nanos; 0 where no bid is below it."""
    price, chance = offers(counts, feed, tried)
    place = shading.best(price, chance, values).place
    return np.where(place >= 0, price[place], 0.0)
