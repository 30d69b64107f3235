"""A line item's own log as auctions: what was told of each is exact, the rest is bounded.

A win in second price tells the least bid that wins; so does `to_win`. A loss without it tells
only that more was needed, a win in first price only that as much was enough. What bids would
have brought where they lost was never seen.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from service.guard.fees import Fees
from service.rehearsal.player import Auction

EXACT = (
    "outcomes of bids at or below a bid that lost, and of bids against a price that was told",
    "values of impressions that were won, up to what had come by now",
)
ASSUMED = (
    "competing bids, floors and what came up for sale do not answer to other bids",
    "a bid above one that lost, where nobody told the price, is left out: it costs nothing, wins "
    "nothing and teaches nothing, and is counted",
    "a win whose value was never seen counts at the mean of the values seen; it teaches its price "
    "and nothing of value, and is counted",
)


@dataclass(frozen=True, slots=True)
class Logged:
    """
    One decision with what became of it; money in nanos, outcomes gross as the stream has them.

    Args:
        at_ms: When it was made.
        source: Where the impression was sold.
        floor: Least the seller took, net.
        bid: The bid, gross; None for a pass.
        kind: "won", "lost", "void", or None where nothing was heard.
        price: What was paid for a win.
        to_win: The least bid that wins, where it was told.
        auction: Kind of auction.
        told_ms: When the outcome came.
        value: What it has brought; None where nothing was said of it.
        valued_ms: When the first of it came.
    """

    at_ms: int
    source: str
    floor: int
    bid: int | None = None
    kind: str | None = None
    price: int | None = None
    to_win: int | None = None
    auction: str = "second"
    told_ms: int | None = None
    value: int | None = None
    valued_ms: int | None = None


def mean_value(rows: Iterable[Logged]) -> int:
    """The mean over what was won and valued; 0 where nothing was."""
    seen = [row.value for row in rows if row.kind == "won" and row.value is not None]
    return round(sum(seen) / len(seen)) if seen else 0


def auctions(rows: Sequence[Logged], fees: Fees) -> list[Auction]:
    """The auctions of a log, in its order."""
    mean, found = mean_value(rows), list[Auction]()
    at_ms = 0
    for row in rows:
        # Decisions of several workers are written piece by piece, not quite in order.
        at_ms = max(at_ms, row.at_ms)
        found.append(_auction(row, at_ms, mean, fees))
    return found


def _auction(row: Logged, at_ms: int, mean: int, fees: Fees) -> Auction:
    least, most_lost, least_won = _known(row, fees)
    # A value that comes without its win is a mistake of whoever reported it.
    value = row.value if row.kind == "won" else None
    # Clocks of two machines differ, and news cannot come before its auction.
    told_ms = 0 if row.told_ms is None else max(0, row.told_ms - at_ms)
    late_ms = 0 if row.valued_ms is None else max(0, row.valued_ms - at_ms)
    worth = mean if value is None else value
    return Auction(
        *(at_ms, max(least, row.floor), value, worth, row.floor, row.source, None, ()),
        *(late_ms, told_ms, most_lost, least_won),
    )


def _known(row: Logged, fees: Fees) -> tuple[int, int | None, int | None]:
    """The least bid that wins, and the limits of it where it was not told; net."""
    # Only in second price is what a win cost the bid of somebody else.
    told = row.price if row.kind == "won" and row.auction == "second" else row.to_win
    if told is not None:
        return fees.net(told), None, None
    bid = None if row.bid is None else fees.net(row.bid)
    if row.kind == "won" and bid is not None:
        return bid, None, bid
    if row.kind == "lost" and bid is not None:
        return bid + 1, bid, None
    # A pass, a void or a silence says no more than that the floor had to be reached.
    return row.floor, max(row.floor - 1, 0), None


def says(rows: Sequence[Logged]) -> dict[str, Any]:
    """What is exact and what is assumed in a replay of these rows."""
    return {"exact": list(EXACT), "assumed": list(ASSUMED), "decisions": len(rows)}
