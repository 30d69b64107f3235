"""Many seeds of one policy side by side on arrays, apart from the way of production.

The formulas are those of production, since every index is elementwise; guard, allowance and
budget are its arithmetic on arrays. Only policies are played here for which a test finds
every bid equal to the one that goes the way of production.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np

from service.decision import posterior
from service.decision.counts import Counts, nothing
from service.decision.methods import METHODS
from service.decision.terms import Terms
from service.learner.arrays import Numbers
from service.rehearsal.grounds import Ground
from service.rehearsal.player import Stage, staged
from service.rehearsal.taken import PASSED, Columns, Flags, Nanos


class Lockstep(NamedTuple):
    """What every seed did, and why seeds passed, all together."""

    columns: list[Columns]
    passes: Counter[str]


def fits(config: Mapping[str, Any], stage: Stage) -> bool:
    """Whether a policy can be played here: one index for all, and nothing but money binds."""
    method, value = METHODS[config["policy"]["method"]], config["value"]
    alike = method.draw is None and not (method.by_law or method.by_features)
    plain = not any(value.get(name) for name in ("drift", "change", "hints"))
    paced = (config.get("pacing") or {}).get("method", "none") != "none"
    free = not (paced or config.get("return_target") or config.get("fees"))
    undivided = config.get("daily_budget") is None
    return alike and plain and free and undivided and stage.at_once and stage.auction == "second"


def play_many(
    config: Mapping[str, Any],
    stage: Stage,
    grounds: Sequence[Ground],
    block: int,
    advance: Callable[[int], None],
) -> Lockstep:
    """
    Play one policy on many sequences of one length.

    Args:
        config: A line item's internal configuration for which `fits` holds.
        stage: What it plays on.
        grounds: One for each seed.
        block: Auctions from one snapshot to the next.
        advance: Told how many auctions were played since it was last told.
    """
    terms = Terms.from_config(staged(config, stage))
    # Auctions as rows, since a round needs one number of every seed.
    least = np.ascontiguousarray(np.stack([one.least for one in grounds], axis=1))
    taught = np.stack([one.values for one in grounds], axis=1)
    table = _Table(least, taught, grounds[0].floor, terms, int(config["budget"]))
    for start in range(0, least.shape[0], block):
        end = min(start + block, least.shape[0])
        table.play(start, end)
        advance((end - start) * len(grounds))
    return Lockstep([table.columns(at, one) for at, one in enumerate(grounds)], table.passes)


class _Table:
    """Bids and money of all seeds; rows are auctions."""

    def __init__(self, least: Nanos, values: Nanos, floor: int, terms: Terms, budget: int) -> None:
        self._least, self._values, self._floor = least, values, floor
        self._terms, self._method = terms, METHODS[terms.method]
        seeds = least.shape[1]
        self._bids, self._won = np.full_like(least, PASSED), np.zeros(least.shape, np.bool_)
        self._free = np.full(seeds, budget, dtype=np.int64)
        self._budget, self._counts = budget, nothing(seeds)
        self._wins = np.zeros(seeds)
        # As whole numbers of any size, since sums of squares leave what a float holds exactly.
        self._squares = np.zeros(seeds, dtype=np.object_)
        self.passes = Counter[str]()

    def play(self, start: int, end: int) -> None:
        """Play the auctions of one block on one snapshot, then learn from them."""
        price, under_floor = self._prices(), np.zeros(self._free.size)
        for turn in range(start, end):
            # The snapshot stands for a block, but money is looked at before every bid.
            bid = np.minimum(price, self._free)
            made = (bid > 0) & (bid >= self._floor)
            if not made.all():
                under_floor += self._pass(price)
            won = made & (self._least[turn] <= bid)
            self._bids[turn] = np.where(made, bid, PASSED)
            self._won[turn] = won
            self._free -= np.where(won, self._least[turn], 0)
        self._learn(slice(start, end), under_floor)

    def columns(self, seed: int, ground: Ground) -> Columns:
        """What one seed did."""
        won = np.ascontiguousarray(self._won[:, seed])
        # In a drawn market everything is known of every auction.
        every = np.ones(won.size, np.bool_)
        paid = np.where(won, ground.least, 0)
        bids = np.ascontiguousarray(self._bids[:, seed])
        sold = (ground.least, ground.values, ground.worth)
        return Columns(*sold, bids, paid, won, ~every, every, every)

    def _prices(self) -> Nanos:
        """The proposal of each seed's snapshot, as `decision.price` makes it for one."""
        bid = self._method.index(self._counts, self._terms)
        if self._method.learns and self._terms.allowance is not None:
            mean = posterior.mean(self._counts, self._terms)
            paid = (self._budget - self._free).astype(np.float64)
            bid = np.where(paid - self._wins * mean > self._terms.allowance, _less(bid, mean), bid)
        price = np.floor(np.minimum(bid, float(self._terms.cap)))
        return np.asarray(np.broadcast_to(price, self._free.shape), dtype=np.int64)

    def _pass(self, price: Nanos) -> Flags:
        """Count the passes of one round as the guard names them; returns those under the floor."""
        spent = self._free <= 0
        nothing_left = ~spent & (price <= 0)
        under = ~spent & ~nothing_left & (price < self._floor)
        held = ~spent & ~nothing_left & ~under & (self._free < np.minimum(price, self._floor))
        named = {
            "budget_spent": spent,
            "price_rounds_to_zero": nothing_left,
            "under_floor": under,
            "budget_held": held,
        }
        self.passes.update({name: int(one.sum()) for name, one in named.items() if one.any()})
        return under

    def _learn(self, block: slice, under_floor: Numbers) -> None:
        won, made = self._won[block], self._bids[block] != PASSED
        gained = np.where(won, np.minimum(self._values[block], self._terms.ceiling), 0)
        wins, old = won.sum(axis=0), self._counts
        self._wins = self._wins + wins
        if gained.any():
            self._squares = self._squares + np.square(gained.astype(np.object_)).sum(axis=0)
        self._counts = Counts(
            old.rounds + made.sum(axis=0) + under_floor,
            old.known + wins,
            old.converted + (gained > 0).sum(axis=0),
            old.amount + gained.sum(axis=0),
            self._squares.astype(np.float64),
        )


def _less(bid: Numbers, mean: Numbers) -> Numbers:
    return np.asarray(np.minimum(bid, mean), dtype=np.float64)
