"""What is known of competing bids, source by source, for people; nothing here moves a price."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from service.decision.describing import describe
from service.decision.market import drawable, state_of
from service.decision.price import Ready
from service.decision.rule import FIRST
from service.learner.arrays import Numbers, double
from service.learner.curve import Curve, curve
from service.learner.curve_counts import Counts
from service.learner.market_state import POOLED

PRICES_MAX = 50
PRICES_BEYOND = 10  # So many of them reach from the highest place that was told up to the cap.
CAUTIONS = (
    "a curve is of the auctions we bid in; with our own correlated bids, as when we bid more for "
    "impressions that rivals want too, the estimates from censored outcomes are biased: they "
    "assume bids independent of the competing bid",
    "passes under the floor are not in it: where floors differ, high floors are missing",
    "an interval holds for each price on its own unless it says otherwise, and for a market that "
    "does not change",
    "the interval of a surplus joins that of the chance with that of the value, so it is wider "
    "than 95 %",
)
NOTHING = "nothing is known of this source yet"
SILENT = "outside the identified range the data say nothing but the limits given"


def curves(ready: Ready) -> dict[str, object]:
    """Each source's curve at up to 50 prices; money in nanos under names in `_nanos`."""
    learnt, market = describe(ready), state_of(ready.memory, ready.terms)
    value = _value(ready, learnt)
    sources = [
        _source(auction, source, market.counts((auction, source)), value, ready.terms.cap)
        for auction, source in sorted(market.sources)
    ]
    return {
        "currency": ready.terms.currency,
        "unit": "per auction, as CPM",
        "value": {
            "estimate_cpm_nanos": round(value[0]),
            "low_cpm_nanos": round(value[1]),
            "high_cpm_nanos": round(value[2]),
            "from": "the mean so far" if learnt.get("mean_nanos") is not None else "the guess",
        },
        "sources": sources,
        "says": None if sources else "no auction has told anything of competing bids yet",
        "cautions": list(CAUTIONS),
    }


def _value(ready: Ready, learnt: dict[str, object]) -> tuple[float, float, float]:
    mean, low, high = (learnt.get(f"{name}_nanos") for name in ("mean", "low", "high"))
    limits = [float(one) if isinstance(one, int) else 0.0 for one in (low, high)]
    guess = float(mean) if isinstance(mean, int) else float(ready.terms.expected)
    return guess, limits[0], limits[1]


def _source(
    auction: str, source: str, counts: Counts, value: tuple[float, float, float], cap: int
) -> dict[str, object]:
    counts = drawable(counts)
    one = curve(counts)
    known = one.identified_range
    return {
        "source": source if source != POOLED else None,
        "pooled": source == POOLED,
        "auction": auction,
        "auctions": round(one.auctions, 3),
        "method": one.method,
        "interval": one.interval,
        "identified": None
        if known is None
        else {"from_cpm_nanos": round(known[0]), "to_cpm_nanos": round(known[1])},
        "says": NOTHING if known is None else SILENT,
        "prices": _rows(one, auction, value, _places(counts, cap)),
    }


def _rows(
    one: Curve, auction: str, value: tuple[float, float, float], places: NDArray[np.intp]
) -> list[dict[str, object]]:
    columns = {
        "win_probability": (one.share, one.low, one.high),
        "expected_cost": _cost(one, auction),
        "expected_surplus": _surplus(one, auction, value),
    }
    return [
        {
            "price_cpm_nanos": round(float(one.price[place])),
            "identified": bool(one.identified[place]),
            **{name: _said(name, [part[place] for part in at]) for name, at in columns.items()},
        }
        for place in places.tolist()
    ]


def _said(name: str, numbers: list[float]) -> dict[str, object]:
    """Estimate and limits, in money but for the chance; null where nothing is identified."""
    tail = "" if name == "win_probability" else "_cpm_nanos"
    write = round if tail else float
    said = [None if math.isnan(one) else write(float(one)) for one in numbers]
    return dict(zip((f"{part}{tail}" for part in ("estimate", "low", "high")), said, strict=True))


def _cost(one: Curve, auction: str) -> tuple[Numbers, Numbers, Numbers]:
    """
    What a bid costs per auction: b F(b) where one pays it, b F(b) - the area under F else.

    The limits of the area are those of the limits of F.
    """
    if auction == FIRST:
        price = one.price
        return double(price * one.share), double(price * one.low), double(price * one.high)
    middle, low, high = (_area(one.price, share) for share in (one.share, one.low, one.high))
    least = np.maximum(one.price * one.low - high, 0.0)
    return double(one.price * one.share - middle), double(least), double(one.price * one.high - low)


def _surplus(
    one: Curve, auction: str, value: tuple[float, float, float]
) -> tuple[Numbers, Numbers, Numbers]:
    """(v - b) F(b), and beside it the area under F where one pays the competing bid."""
    areas = [
        np.zeros(one.price.size) if auction == FIRST else _area(one.price, share)
        for share in (one.share, one.low, one.high)
    ]
    gains = [worth - one.price for worth in value]
    # What is lost at a price above the value is lost the more often it wins.
    low = np.where(gains[1] < 0.0, gains[1] * one.high, gains[1] * one.low) + areas[1]
    high = np.where(gains[2] < 0.0, gains[2] * one.low, gains[2] * one.high) + areas[2]
    return double(gains[0] * one.share + areas[0]), double(low), double(high)


def _area(price: Numbers, share: Numbers) -> Numbers:
    """The area under a curve of steps, from 0 to each price; not a number above a gap."""
    return double(np.append(0.0, np.cumsum(share[:-1] * np.diff(price))))


def _places(counts: Counts, cap: int) -> NDArray[np.intp]:
    """Most prices where something was told, a few from there up to the cap."""
    cells = counts.ticks.cells
    visited = [min(place, cells) for place, _ in counts.rows] or [1]
    top = min(-(-cap // counts.ticks.tick), cells)
    low, high = min(max(1, min(visited) - 1), top), min(max(visited), top)
    told = np.linspace(low, high, PRICES_MAX - PRICES_BEYOND)
    beyond = np.linspace(high, top, PRICES_BEYOND)
    return np.unique(np.round(np.append(told, beyond)).astype(np.intp))
