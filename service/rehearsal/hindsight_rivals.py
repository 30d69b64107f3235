"""A flat price on a log, with competing bids taken to be independent of ours: the narrowest line.

What is known for certain stays as it is. Of an auction that a lower bid lost, the curve of the
bids beyond that bid says how likely the price would have won it, and at what cost; of one that a
higher bid won in first price, how likely the price would have been enough.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from service.decision.market import drawable
from service.decision.rule import FIRST, SECOND
from service.learner.arrays import Numbers, double
from service.learner.curve import Curve, curve
from service.learner.curve_counts import ABOVE, Counts, add, down, fitting
from service.learner.market_part import said
from service.learner.market_state import joined
from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import LOST, WON, Logged
from service.rehearsal.hindsight_assumed import RISK, VALUES_ALIKE, Line, Worth, mean_value
from service.rehearsal.hindsight_bounds import BOUNDED, bounded

CELLS_MAX = 128  # A curve is drawn for each of them that a losing bid lies in.
RIVALS = {
    "kaplan-meier": "assumes besides that competing bids are independent of ours and of values, "
    "given the source, and of one law (Kaplan, Meier 1958, with Greenwood's limits)",
    "empirical": "assumes besides that competing bids are independent of ours and of values, "
    "given the source, and of one law (Dvoretzky, Kiefer, Wolfowitz 1956)",
    "reverse-kaplan-meier": "assumes besides that competing bids are independent of ours and of "
    "values, given the source, and of one law (product limit, reversed)",
    "isotonic": "assumes besides that competing bids are independent of ours and of values, given "
    "the source, of one law, and only that a higher bid wins no less (monotone)",
    "turnbull": "assumes besides that competing bids are independent of ours and of values, given "
    "the source, and of one law (Turnbull 1976)",
}
ROUGH = frozenset({"isotonic", "turnbull"})  # Their limits are a guide and keep no level.

Ends = tuple[float, float]


@dataclass(slots=True)
class _Source:
    """One source's curves: of all its auctions, and of what lies beyond each losing bid."""

    counts: Counts
    level: float
    whole: Curve = field(init=False)
    beyond: dict[int, Curve] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.whole = curve(self.counts, self.level)

    def after(self, bid: int) -> Curve:
        """The curve of competing bids known to lie above a bid; exact for a product limit."""
        place = down(bid, self.counts.ticks)
        if place not in self.beyond:
            rows = tuple(row for row in self.counts.rows if row[0] > place)
            self.beyond[place] = curve(Counts(self.counts.ticks, rows), self.level)
        return self.beyond[place]


def rivals_alike(rows: Sequence[Logged], price: int, worth: Worth) -> Line | None:
    """The line of a flat price; None where no auction told anything."""
    told: dict[tuple[str, str], list[Logged]] = {}
    for row in rows:
        if row.result in (WON, LOST) and row.auction in (FIRST, SECOND):
            told.setdefault((row.auction, row.source), []).append(row)
    if not told:
        return None
    # Each curve has its part of the risk, since all must hold at once.
    level = 1.0 - RISK / 2.0 / len(told)
    sources = {key: _Source(_counts(some, price, worth), level) for key, some in told.items()}
    mean, flat = mean_value(rows, worth, RISK / 2.0), Alternative("flat", price)
    low = high = 0.0
    auctions, methods = 0, set[str]()
    for row in rows:
        if row.counts:
            source = sources.get((row.auction, row.source))
            ends, used = _ends(row, price, flat, mean, source)
            low, high, auctions = low + ends[0], high + ends[1], auctions + 1
            methods |= used
    words = [VALUES_ALIKE + ";", *sorted({RIVALS.get(one, one) for one in methods})]
    sure = None if methods & ROUGH else 1.0 - RISK
    ends_of_all = int(np.floor(low)), int(np.ceil(high))
    return Line("rivals_alike", *ends_of_all, auctions, " ".join(words), sure)


def _ends(
    row: Logged, price: int, flat: Alternative, mean: tuple[int, int], source: _Source | None
) -> tuple[Ends, set[str]]:
    """Limits of one auction, and the estimator they come from where one was needed."""
    base = bounded(row, flat.bids(row), mean)
    ends = float(base.low), float(base.high)
    hidden = row.result in (WON, LOST) and row.least is None
    if base.kind != BOUNDED or source is None or not hidden:
        return ends, set()
    found = _lower(row, price, source.whole) if row.result == WON else None
    if found is None:
        # What lies beyond a losing bid is a log of its own where rivals were seen or censored.
        used = source.after(row.bid)
        if used.method not in ("kaplan-meier", "empirical", "nothing"):
            used, found = source.whole, _raised(row, price, source.whole, mean)
        else:
            found = _higher(row, price, used, mean)
    else:
        used = source.whole
    # Both hold, so what they share does; rounding may leave a nano between them.
    return (max(ends[0], min(found[0], ends[1])), min(ends[1], max(found[1], ends[0]))), {
        used.method
    }


def _higher(row: Logged, price: int, beyond: Curve, mean: tuple[int, int]) -> Ends:
    """A second-price loss at a higher price, by the curve beyond its bid."""
    if beyond.method == "nothing":
        return -np.inf, np.inf
    below, above = _around(beyond, price)
    start = _around(beyond, row.bid)[0]
    low, high = beyond.low, beyond.high
    edges = np.append(beyond.price[start : below + 1], price)
    edges[0] = row.bid
    steps = np.diff(np.maximum.accumulate(edges))
    upper: Numbers = double(high[np.minimum(np.arange(start, below + 1) + 1, above)])
    least, most = _weighed(mean[0] - price, mean[1] - price, float(low[below]), float(high[above]))
    return least + float(low[start : below + 1] @ steps), most + float(upper @ steps)


def _raised(row: Logged, price: int, whole: Curve, mean: tuple[int, int]) -> Ends:
    """A loss where one pays the bid: the chance that the price wins what the bid did not."""
    below, above = _around(whole, price)
    under, over = _around(whole, row.bid)
    chances = []
    for at_price, at_bid in (
        (whole.low[below], whole.high[over]),
        (whole.high[above], whole.low[under]),
    ):
        left = 1.0 - float(at_bid)
        chances.append(max(0.0, float(at_price) - float(at_bid)) / left if left > 0.0 else 0.0)
    least, most = _weighed(mean[0] - price, mean[1] - price, chances[0], max(chances))
    if row.auction == FIRST:
        return least, most
    # Where the competing bid is paid, a win costs the bid at least.
    return least, max(most, most + chances[1] * (price - row.bid))


def _lower(row: Logged, price: int, whole: Curve) -> Ends:
    """A first-price win at a lower price: the chance that the price would have been enough."""
    below, above = _around(whole, price)
    under, over = _around(whole, row.bid)
    least = float(whole.low[below]) / max(float(whole.high[over]), 1e-12)
    at_bid = float(whole.low[under])
    most = min(1.0, float(whole.high[above]) / at_bid) if at_bid > 0.0 else 1.0
    return _weighed(row.low - price, row.high - price, min(least, 1.0), most)


def _weighed(gain_low: float, gain_high: float, least: float, most: float) -> Ends:
    """The least and the most of a gain times its chance."""
    return gain_low * (most if gain_low < 0 else least), gain_high * (
        least if gain_high < 0 else most
    )


def _around(one: Curve, price: int) -> tuple[int, int]:
    """The places of the ticks at or below and at or above a price."""
    below = int(np.searchsorted(one.price, price, side="right")) - 1
    exact = one.price[below] == price
    return below, min(below if exact else below + 1, one.price.size - 1)


def _counts(rows: Sequence[Logged], price: int, worth: Worth) -> Counts:
    ticks = fitting(max(price, max(row.bid for row in rows), 2))
    outcomes = []
    for row in rows:
        body = {"bid": row.bid, "to_win": row.least, "price": row.price}
        outcome = said(row.result == WON, row.auction, body, ticks, priced=worth.priced)
        if outcome is not None:
            outcomes.append(outcome)
    counts = drawable(add(Counts(ticks), outcomes))
    censored = any(row[ABOVE] for _, row in counts.rows)
    return joined(counts, CELLS_MAX) if censored else counts
