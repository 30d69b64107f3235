"""The win curve: from counts to the chance to win at each price, and how far it is known.

Apart from each estimator, because it chooses one by what the feed tells and says where the data
say nothing. There it gives no estimate, only the bounds that a rising curve must keep.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from service.learner import isotonic, kaplan_meier, turnbull
from service.learner.arrays import Numbers, double
from service.learner.curve_counts import ABOVE, BELOW, LOST, SEEN, WON, Counts, prices

LIKELIHOOD_MISSING = 0.01

Method = Literal["nothing", "empirical", "kaplan-meier", "reverse-kaplan-meier"]
Mixed = Literal["isotonic", "turnbull"]


@dataclass(frozen=True, slots=True)
class Curve:
    """
    The distribution of the highest competing bid at each price.

    Args:
        price: Prices in nanos, ascending.
        share: Estimated chance that a bid at the price wins; not a number where not identified.
        low: Lower end of its interval, rising in the price.
        high: Upper end, rising too.
        method: The estimator.
        interval: Where the interval comes from, and what it holds for.
        auctions: Number of auctions behind it, those half forgotten as halves.
    """

    price: Numbers
    share: Numbers
    low: Numbers
    high: Numbers
    method: Method | Mixed
    interval: str
    auctions: float

    @property
    def identified(self) -> NDArray[np.bool_]:
        """Where the data say something at all."""
        return np.asarray(np.isfinite(self.share), dtype=np.bool_)

    @property
    def identified_range(self) -> tuple[float, float] | None:
        """The lowest and the highest price of which the data say something, in nanos."""
        known = self.price[self.identified]
        return (float(known[0]), float(known[-1])) if known.size else None


def curve(counts: Counts, level: float = 0.95) -> Curve:
    """
    Estimate the chance to win at each price.

    One kind of censoring has its product-limit or monotone estimate; a mixture has Turnbull's.
    The level holds for each price on its own, for the empirical curve for all at once.

    Args:
        counts: What the auctions told.
        level: Coverage of the intervals.
    """
    columns = [counts.column(which) for which in range(5)]
    has = frozenset(which for which, column in enumerate(columns) if column.any())
    draw = _DRAWN.get(has, _turnbull if has else _nothing)
    share, low, high, method, interval = draw(columns, level)
    # The place beyond the top is no price of ours.
    end = counts.ticks.cells + 1
    # The curve rises: a lower end holds at all higher prices, an upper end at all lower ones.
    low = np.maximum.accumulate(np.where(np.isfinite(low), low, 0.0))
    high = np.minimum.accumulate(np.where(np.isfinite(high), high, 1.0)[::-1])[::-1]
    parts = (double(share[:end]), double(low[:end]), double(high[:end]))
    return Curve(prices(counts.ticks), *parts, method, interval, counts.auctions)


Drawn = tuple[Numbers, Numbers, Numbers, Method | Mixed, str]


def _nothing(columns: list[Numbers], level: float) -> Drawn:
    silent = np.full(columns[SEEN].size, np.nan)
    return silent, silent, silent, "nothing", "none: nothing is known"


def _empirical(columns: list[Numbers], level: float) -> Drawn:
    total = columns[SEEN].sum()
    share = np.cumsum(columns[SEEN]) / total
    reach = float(isotonic.dkw_reach(total, level))
    low, high = np.maximum(share - reach, 0.0), np.minimum(share + reach, 1.0)
    return share, low, high, "empirical", "Dvoretzky-Kiefer-Wolfowitz band, all prices at once"


def _kaplan_meier(columns: list[Numbers], level: float) -> Drawn:
    product = kaplan_meier.kaplan_meier(columns[SEEN], columns[ABOVE])
    low, high = kaplan_meier.log_log_interval(product, level)
    # Beyond the highest bid that was ever at risk nothing was looked at; but once all have won,
    # higher bids win too.
    unknown = (product.at_risk <= 0.0) & (product.share > 0.0)
    share, low, high = (np.where(unknown, np.nan, 1.0 - one) for one in (product.share, high, low))
    return share, low, high, "kaplan-meier", "Greenwood, log-log, each price on its own"


def _reverse(columns: list[Numbers], level: float) -> Drawn:
    # An equal competing bid is beaten and so not seen: who bid there was not at risk there, but
    # from the next place on.
    below = np.append(0.0, columns[BELOW][:-1])
    product = kaplan_meier.reverse_kaplan_meier(columns[SEEN], below)
    low, high = kaplan_meier.log_log_interval(_mirrored(product), level)
    # Below the lowest bid and the lowest price told nobody has looked.
    looked_at = (np.cumsum(columns[SEEN] + columns[BELOW]) > 0.0) | (product.share <= 0.0)
    share, low, high = (
        np.where(looked_at, one, np.nan) for one in (product.share, low[::-1], high[::-1])
    )
    return share, low, high, "reverse-kaplan-meier", "Greenwood, log-log, each price on its own"


def _mirrored(product: kaplan_meier.Product) -> kaplan_meier.Product:
    return kaplan_meier.Product(*(double(one[::-1]) for one in product))


def _isotonic(columns: list[Numbers], level: float) -> Drawn:
    trials = columns[WON] + columns[LOST]
    blocks = isotonic.isotonic(columns[WON], trials)
    low, high = isotonic.clopper_pearson(blocks.wins, blocks.trials, level)
    # Between two prices tried the curve may rise anywhere; the upper end is that of the next.
    tried = trials > 0.0
    high = np.where(tried, high, np.nan)
    # Above the highest bid tried nobody has looked.
    beyond = np.arange(trials.size) > np.flatnonzero(tried)[-1]
    share = np.where(beyond, np.nan, blocks.rate)
    return share, low, high, "isotonic", "Clopper-Pearson per pooled block, a rough guide"


def _turnbull(columns: list[Numbers], level: float) -> Drawn:
    size = columns[SEEN].size
    at = np.arange(size)
    # Place j is the interval (j - 1, j], so the ends run from -1 to the last place.
    low = np.concatenate([at - 1, at, np.full(size, -1)])
    high = np.concatenate([at, np.full(size, size - 1), at])
    above, below = columns[ABOVE] + columns[LOST], columns[BELOW] + columns[WON]
    weight = np.concatenate([columns[SEEN], above, below])
    told = (weight > 0.0) & (low < high)
    # What may be missing from the log-likelihood of all auctions together is next to nothing.
    tolerance = max(turnbull.TOLERANCE, LIKELIHOOD_MISSING / weight.sum())
    masses = turnbull.turnbull(low[told], high[told], weight[told], tolerance)
    sure, ended = _summed(masses, size)
    # Where the least and the most agree, it does not matter where the masses lie.
    share = np.where(np.abs(ended - sure) < 1e-12, sure, np.nan)
    # How many auctions say on which side of a place their competing bid was.
    resolved = np.cumsum(columns[SEEN] + below) + (above + columns[SEEN])[::-1].cumsum()[::-1]
    resolved -= columns[SEEN]
    lower, _ = isotonic.clopper_pearson(sure * resolved, resolved, level)
    _, upper = isotonic.clopper_pearson(ended * resolved, resolved, level)
    return share, lower, upper, "turnbull", "Clopper-Pearson on what is told there, a rough guide"


def _summed(masses: turnbull.Masses, size: int) -> tuple[Numbers, Numbers]:
    # Inside an innermost interval its mass may lie at any place: the least and the most.
    ended = np.bincount(masses.high, masses.mass, size)
    begun = np.bincount(masses.low + 1, masses.mass, size)
    return double(np.cumsum(ended)), double(np.cumsum(begun))


_DRAWN = {
    frozenset({SEEN}): _empirical,
    frozenset({SEEN, ABOVE}): _kaplan_meier,
    frozenset({ABOVE}): _kaplan_meier,
    frozenset({SEEN, BELOW}): _reverse,
    frozenset({BELOW}): _reverse,
    frozenset({WON}): _isotonic,
    frozenset({LOST}): _isotonic,
    frozenset({WON, LOST}): _isotonic,
}
