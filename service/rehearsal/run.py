"""Play a line item against an invented market, with the very code that bids in production.

`play` goes the way of production: entries, fold, snapshot, proposal. `play_many` plays
many seeds at once through the same index formulas on arrays; a test holds both to the
same result. Outcomes are known at once, and a new snapshot comes every `block` rounds.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.decision.counts import Counts, nothing
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.price import Proposal, Ready, ready
from service.decision.rule import RULES
from service.decision.terms import Terms
from service.learner.exptree_law import Law
from service.learner.fold import Lesson, fold
from service.learner.memory import Memory
from service.learner.rules import Rules
from service.learner.tally import Tally
from service.rehearsal.hindsight import surplus_of
from service.rehearsal.market import Nanos, Path

# Values come with the win, and every window closes before the next block begins.
WINDOW_MS = 64
BLOCK_MS = 1000

EVERY_TIME = Opportunity("rehearsal", source="rehearsal")


@dataclass(frozen=True, slots=True)
class Played:
    """
    What a run came to, in nanos.

    Args:
        prices: The price of each block, or of each bid where they are drawn; -1 where it passed.
    """

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
    memory, prices, surplus = Memory.fresh(), list[int](), 0
    terms = replace(terms, window_ms=WINDOW_MS)
    rules = Rules(terms.ceiling, terms.arrival, WINDOW_MS, drift=terms.drift, tree=terms.tree)
    for start in range(0, path.competing.size, block):
        competing = path.competing[start : start + block]
        values = path.values[start : start + block]
        snapshot = ready(memory, terms)
        bids = _bids(snapshot, competing.size, rng)
        won = competing <= bids
        surplus += int(np.where(won, values - competing, 0).sum())
        prices += np.unique(bids).tolist() if not snapshot.draws else bids.tolist()
        lessons = _lessons(competing, values, bids, snapshot.law, start // block * BLOCK_MS)
        memory = fold(memory, lessons, rules)
    total = memory.total
    return Played(surplus, total.paid, total.wins, prices, total)


def play_many(
    paths: Sequence[Path],
    terms: Terms,
    block: int,
    rng: Generator | None = None,
    worth_each: int | Nanos | None = None,
) -> NDArray[np.int64]:
    """
    The surplus of each of many sequences of one length, in nanos; otherwise as `play`.

    Without brakes and without forgetting: with outcomes known at once no brake acts.

    Args:
        paths: Competing bids and values.
        terms: What is configured; not for methods that bid by a law.
        block: Opportunities from one snapshot to the next.
        rng: For methods that draw.
        worth_each: What every impression won counts in place of its own value, one number for
            all runs or one each; values are learnt as they are all the same.
    """
    competing = np.stack([path.competing for path in paths])
    values = np.stack([path.values for path in paths])
    counts, surplus = nothing(len(paths)), np.zeros(len(paths), np.int64)
    for start in range(0, competing.shape[1], block):
        rivals, worth = competing[:, start : start + block], values[:, start : start + block]
        won = rivals <= bids_of(counts, terms, rivals.shape[1], rng)
        counted = worth if worth_each is None else np.reshape(worth_each, (-1, 1))
        surplus += np.where(won, counted - rivals, 0).sum(axis=1)
        counts = _after(counts, won, np.minimum(worth, terms.ceiling))
    return surplus


def play_fixed(paths: Sequence[Path], bid: int) -> NDArray[np.int64]:
    """The surplus of one bid for everything on each sequence, in nanos."""
    earned = [surplus_of(path.competing, path.values, bid) for path in paths]
    return np.array(earned, dtype=np.int64)


def bids_of(
    counts: Counts, terms: Terms, opportunities: int = 1, rng: Generator | None = None
) -> Nanos:
    """
    Bids for many runs (rows) at once: value, rule, cap, rounded down, as `ready` does for one.

    One column serves all opportunities, unless the method draws a bid for each.
    """
    method = METHODS[terms.method]
    columns = Counts(*(one[:, np.newaxis] for one in counts.all))
    if method.draw is not None and rng is not None:
        columns = Counts(*(np.repeat(one, opportunities, axis=1) for one in columns.all))
        value = method.draw(columns, terms, rng)
    else:
        value = method.index(columns, terms)
    bid = RULES[terms.auction](value)
    return np.asarray(np.floor(np.minimum(bid, float(terms.cap))), dtype=np.int64)


def _bids(snapshot: Ready, opportunities: int, rng: Generator) -> Nanos:
    """One bid for each opportunity, all alike unless they are drawn; -1 for a pass."""
    asked = opportunities if snapshot.draws else 1
    answers = [snapshot.propose(EVERY_TIME, rng) for _ in range(asked)]
    prices = [answer.price if isinstance(answer, Proposal) else -1 for answer in answers]
    return np.resize(np.array(prices, dtype=np.int64), opportunities)


def _after(counts: Counts, won: NDArray[np.bool_], worth: Nanos) -> Counts:
    gained = np.where(won, worth, 0)
    return Counts(
        counts.rounds + won.shape[1],
        counts.known + won.sum(axis=1),
        counts.converted + (gained > 0).sum(axis=1),
        counts.amount + gained.sum(axis=1),
        counts.amount_square + np.square(gained, dtype=np.float64).sum(axis=1),
    )


def _lessons(
    competing: Nanos, values: Nanos, bids: Nanos, law: Law | None, at_ms: int
) -> Iterator[Lesson]:
    """One block's outcomes, with what their bids were likely to beat where a law drew them."""
    said: dict[str, Any] = {"round": 1} if law is None else {"round": 1, "stage": law.stage}
    for rival, amount, bid in zip(competing.tolist(), values.tolist(), bids.tolist(), strict=True):
        if rival > bid:
            yield Lesson("lost", {**said, "to_win": rival}, at_ms)
            continue
        win = {**said, "price": rival, "bid": bid, "source": "rehearsal"}
        if law is not None:
            # The least bid that wins is `rival`, so what must be beaten lies just below it.
            win["chance"] = law.chance_above(rival - 1)
        yield Lesson("won", win, at_ms)
        yield Lesson("value", {"amount": amount, "was": None, "won_ms": at_ms, "win": win}, at_ms)
    # It teaches nothing, but moves the clock on until every window has closed.
    yield Lesson("lease", {}, at_ms + BLOCK_MS // 2)
