"""Hindsight where bids were drawn with a chance that was kept: weights, three estimators, refusals.

Two draws are known here. A control share draws between two rules, so its flat price has the
chance of the share. A law of bids draws a price among many: then a flat price is stood for by a
band of prices around it, drawn evenly, which the weights fit exactly; the band is named.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.learner.arrays import Numbers, double
from service.rehearsal import off_policy
from service.rehearsal.auction_log import PASSED, SILENT, UNDER_FLOOR, WON, Logged
from service.rehearsal.off_policy import EFFECTIVE_MIN, Estimate

CONTROL = "control"
BAND_SHARE = 10  # A band reaches a tenth of its price to either side.
CELLS = 8
NOT_DRAWN = "bids_not_drawn"
TOO_FEW = "too_few_effective"
SAYS = {
    NOT_DRAWN: "the bids of this log were not drawn with chances that were kept, at or near this "
    "price; only exact outcomes and bounds can be told",
    TOO_FEW: f"fewer than {EFFECTIVE_MIN:.0f} effective auctions: no verdict",
}
ASSUMES = (
    "assumes that the chances kept are those the bids were drawn with; 95 % by the normal "
    "approximation; auctions without a kept chance or with windows that may be open are left out"
)


@dataclass(frozen=True, slots=True)
class Drawn:
    """
    The rows that have weights; money in nanos.

    Args:
        weights: One for each row.
        rewards: Surplus of each.
        cells: Which cell of a model each lies in.
        other: Which cell the alternative lies in.
        stands_for: What the alternative is, in words.
    """

    weights: Numbers
    rewards: Numbers
    cells: list[int]
    other: list[int]
    stands_for: str


@dataclass(frozen=True, slots=True)
class Refused:
    """Why there is no estimate: a stable code and a sentence."""

    code: str
    says: str
    effective: float = 0.0


def ripe(rows: Sequence[Logged]) -> list[Logged]:
    """What came before the first impression whose window is open, and of which word has come."""
    # Leaving out open windows alone would keep what converts fast, which is not chosen by chance.
    opens = min((row.at_ms for row in rows if row.open), default=None)
    return [
        row
        for row in rows
        if row.counts and row.result != SILENT and (opens is None or row.at_ms < opens)
    ]


def drawn(rows: Sequence[Logged], price: int) -> Drawn | None:
    """The weights of a flat price; None where nothing near it was drawn."""
    known = ripe(rows)
    # Where the arm was certain not to bid, what was done tells nothing of it.
    chosen = [row for row in known if row.arm_odds is not None and row.arm_odds < 1.0]
    if any(row.arm == CONTROL and row.bid == price for row in chosen):
        # Bids of the plain rule of before, at another price, are no draws of this one.
        mine = [row for row in chosen if row.arm != CONTROL or row.bid in (0, price)]
        return _of_arm(mine)
    return _of_band([row for row in known if row.arm != CONTROL and row.odds is not None], price)


def estimates(rows: Sequence[Logged], price: int) -> dict[str, Estimate] | Refused:
    """IPS, SNIPS and DR of the surplus per auction, or why not."""
    found = drawn(rows, price)
    if found is None:
        return Refused(NOT_DRAWN, SAYS[NOT_DRAWN])
    effective = off_policy.effective(found.weights)
    if effective < EFFECTIVE_MIN:
        return Refused(TOO_FEW, SAYS[TOO_FEW], effective)
    guessed = off_policy.folded_means(found.rewards, found.cells, found.other)
    return {
        "ips": off_policy.ips(found.weights, found.rewards),
        "snips": off_policy.snips(found.weights, found.rewards),
        "dr": off_policy.doubly_robust(found.weights, found.rewards, *guessed),
    }


def _of_arm(rows: Sequence[Logged]) -> Drawn:
    mine = [row.arm == CONTROL for row in rows]
    # No chance below 1 is none at all: it would not have come to pass.
    weights = [own / (row.arm_odds or 1.0) for row, own in zip(rows, mine, strict=True)]
    cells = [int(own) for own in mine]
    words = "the control arm on all traffic, exactly"
    return Drawn(double(weights), _rewards(rows), cells, [1] * len(rows), words)


def _of_band(rows: Sequence[Logged], price: int) -> Drawn | None:
    # A law over many prices hardly ever draws just this one: a band is what it can speak of.
    reach = price // BAND_SHARE
    low, high = max(1, price - reach), price + reach
    # The chance of a pass under the floor is that of all bids below it, in law and band alike.
    weights = [_band_chance(row, low, high) / (row.odds or 1.0) for row in rows]
    if not any(row.bid and weight for row, weight in zip(rows, weights, strict=True)):
        return None
    top = max(row.bid for row in rows)
    cells = [1 + CELLS * row.bid // (top + 1) if row.bid else 0 for row in rows]
    other = [1 + CELLS * price // (top + 1) if row.floor <= price else 0 for row in rows]
    words = "prices drawn evenly within a tenth of it to either side, in its place"
    return Drawn(double(weights), _rewards(rows), cells, other, words)


def _band_chance(row: Logged, low: int, high: int) -> float:
    many = high - low + 1
    if row.result == PASSED:
        below = min(max(row.floor - low, 0), many)
        return below / many if row.reason == UNDER_FLOOR else 0.0
    return 1.0 / many if low <= row.bid <= high else 0.0


def _rewards(rows: Sequence[Logged]) -> Numbers:
    return double(np.array([row.low - row.price if row.result == WON else 0 for row in rows]))
