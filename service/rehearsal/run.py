"""Play a line item against an invented market, with the very code that bids in production.

`play` goes the way of production: entries, fold, snapshot, proposal. `play_many` plays
many seeds at once through the same index formulas on arrays; a test holds both to the
same result. Outcomes are known at once, and a new snapshot comes every `block` rounds.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.decision.method import Counts
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.price import Proposal, ready
from service.decision.rule import RULES
from service.decision.terms import Terms
from service.learner.fold import ONCE, fold
from service.learner.tally import Tally
from service.rehearsal.hindsight import surplus_of
from service.rehearsal.market import Nanos, Path

Entry = tuple[str, Mapping[str, Any]]

EVERY_TIME = Opportunity("rehearsal", source="rehearsal")


@dataclass(frozen=True, slots=True)
class Played:
    """What a run came to, in nanos, with the price of each block; -1 where it passed."""

    surplus: int
    spent: int
    wins: int
    prices: list[int]
    tally: Tally


def play(path: Path, terms: Terms, block: int, rng: Generator) -> Played:
    """
    Play one sequence of opportunities, second price, without a budget.

    Args:
        path: Competing bids and values.
        terms: What is configured.
        block: Opportunities from one snapshot to the next.
        rng: For methods that draw.
    """
    tally, prices, surplus = Tally.fresh(), [], 0
    for start in range(0, path.competing.size, block):
        competing = path.competing[start : start + block]
        values = path.values[start : start + block]
        answer = ready(tally, terms).propose(EVERY_TIME, rng)
        price = answer.price if isinstance(answer, Proposal) else -1
        won = competing <= price
        surplus += surplus_of(competing, values, price)
        prices.append(price)
        entries = _entries(competing, values, won, price, terms.arrival)
        tally = fold(tally, entries, terms.ceiling, terms.arrival)
    return Played(surplus, tally.paid, tally.wins, prices, tally)


def play_many(paths: Sequence[Path], terms: Terms, block: int) -> NDArray[np.int64]:
    """
    The surplus of each of many sequences of one length, in nanos; otherwise as `play`.

    For methods that do not draw, and without brakes: with outcomes known at once none acts.
    """
    competing = np.stack([path.competing for path in paths])
    values = np.stack([path.values for path in paths])
    nothing = np.zeros(len(paths))
    counts, surplus = Counts(nothing, nothing, nothing, nothing), np.zeros(len(paths), np.int64)
    for start in range(0, competing.shape[1], block):
        rivals, worth = competing[:, start : start + block], values[:, start : start + block]
        won = rivals <= bids_of(counts, terms)[:, np.newaxis]
        surplus += np.where(won, worth - rivals, 0).sum(axis=1)
        counts = _after(counts, won, np.minimum(worth, terms.ceiling))
    return surplus


def play_fixed(paths: Sequence[Path], bid: int) -> NDArray[np.int64]:
    """The surplus of one bid for everything on each sequence, in nanos."""
    earned = [surplus_of(path.competing, path.values, bid) for path in paths]
    return np.array(earned, dtype=np.int64)


def bids_of(counts: Counts, terms: Terms) -> Nanos:
    """Bids for many runs at once: value, rule, cap, rounded down, as `ready` does for one."""
    value = METHODS[terms.method].index(counts, terms)
    bid = RULES[terms.auction](value)
    return np.asarray(np.floor(np.minimum(bid, float(terms.cap))), dtype=np.int64)


def _after(counts: Counts, won: NDArray[np.bool_], worth: Nanos) -> Counts:
    gained = np.where(won, worth, 0)
    return Counts(
        counts.rounds + won.shape[1],
        counts.known + won.sum(axis=1),
        counts.converted + (gained > 0).sum(axis=1),
        counts.amount + gained.sum(axis=1),
    )


def _entries(
    competing: Nanos, values: Nanos, won: NDArray[np.bool_], price: int, arrival: str
) -> Iterator[Entry]:
    for rival in competing[won].tolist():
        yield "won", {"price": rival, "bid": price, "source": "rehearsal", "round": 1}
    yield "tick", {"rounds": int((~won).sum()), "under_floor": 0}
    known = values[won].tolist()
    if arrival == ONCE:
        yield from (("value", {"amount": amount, "was": None}) for amount in known)
    else:
        yield "matured", {"wins": len(known), "amounts": [amount for amount in known if amount]}
