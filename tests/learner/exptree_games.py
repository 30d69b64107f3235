"""Games of a tree against invented markets, apart from what is expected of it.

Money is in nanos with a scale of 10^9, so that shares of the sources are read off directly.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.learner.exptree import law, learn
from service.learner.exptree_law import Law
from service.learner.exptree_lessons import Lesson, Lost, Passed, Won, Worth
from service.learner.exptree_rules import FIRST, Rules
from service.learner.exptree_state import Tree
from service.learner.partition import Ticks
from service.rehearsal.hindsight import best_fixed_bid
from service.rehearsal.market import Path

SCALE = 10**9
Nanos = NDArray[np.int64]


@dataclass(frozen=True)
class Market:
    """Competing bids and values, one each per round; a bid wins when it is above."""

    prices: Nanos
    values: Nanos

    @property
    def path(self) -> Path:
        """The same for a rehearsal, where a bid wins when it reaches the competing one."""
        return Path(self.prices + 1, self.values + 1)

    def regret(self, earned: int) -> float:
        """What the best fixed bid in hindsight earns more, in scales."""
        path = self.path
        return (best_fixed_bid(path.competing, path.values).surplus - earned) / SCALE

    def earned(self, bids: Nanos) -> int:
        """What one bid for each round earns, in nanos."""
        return int(np.where(bids > self.prices, self.values - self.prices, 0).sum())


MarketOf = Callable[[int, Generator], Market]


def nanos(share: float) -> int:
    """A share of the scale in nanos."""
    return round(share * SCALE)


def rules(cells: int, win_only: bool, rate: float | None = None) -> Rules:
    """The range cut in equal cells; prices and values reach one scale."""
    return Rules(Ticks(SCALE, SCALE // cells), SCALE, win_only, rate)


def coin_flip(low: float, high: float) -> MarketOf:
    """
    A good impression at the low price or a worthless one at the high price, by a fair coin.

    Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, Proposition 11.
    """

    def market(rounds: int, rng: Generator) -> Market:
        good = rng.random(rounds) < 0.5
        prices = np.where(good, nanos(low), nanos(high))
        return Market(prices, np.where(good, SCALE, 0))

    return market


def calm(rounds: int, rng: Generator) -> Market:
    """Prices uniform on 1,000 ticks, values of one scale with chance 0.3, all independent."""
    prices = rng.integers(1000, size=rounds) * (SCALE // 1000)
    return Market(prices, np.where(rng.random(rounds) < 0.3, SCALE, 0))


def one_price(price: float, chance: float) -> MarketOf:
    """One price and values of one scale or nothing."""

    def market(rounds: int, rng: Generator) -> Market:
        values = np.where(rng.random(rounds) < chance, SCALE, 0)
        return Market(np.full(rounds, nanos(price)), values)

    return market


def play(market: Market, of: Rules, rng: Generator, epoch: int = 1) -> Nanos:
    """The bids of a tree that learns after each epoch of so many rounds."""
    tree, rounds = Tree.fresh(), market.prices.size
    bids = np.empty(rounds, np.int64)
    prices, values = market.prices.tolist(), market.values.tolist()
    for start in range(0, rounds, epoch):
        now, lessons = law(tree, of), list[Lesson]()
        for turn in range(start, min(start + epoch, rounds)):
            bid = now.draw(rng)
            bids[turn] = bid
            lessons += outcome(now, bid, prices[turn], values[turn])
        tree = learn(tree, lessons, of)
    return bids


def outcome(now: Law, bid: int, price: int, value: int) -> Sequence[Lesson]:
    """What one bid drawn from a law teaches."""
    if bid <= price:
        return (Lost(price, now.stage),)
    chance = now.chance_above(price)
    return Won(price, chance, now.stage), Worth(price, chance, now.stage, value)


def epoch_of(of: Rules, tree: Tree, rng: Generator, rounds: int) -> list[Lesson]:
    """The lessons of one epoch whose prices and values lie anywhere, corrections among them."""
    now, lessons = law(tree, of), list[Lesson]()
    for _ in range(rounds):
        price, value, wrong = (int(n) for n in rng.integers(0, [SCALE, 2 * SCALE, SCALE]))
        taught = outcome(now, now.draw(rng), price, wrong)
        lessons += taught
        if len(taught) == 2:
            chance = now.chance_above(price)
            lessons.append(Worth(price, chance, now.stage, value, was=wrong))
    return [*lessons, Passed(3), Lost(None, None), Won(nanos(0.5), None, None, rounds=0)]


def shuffled(lessons: Sequence[Lesson], rng: Generator) -> list[Lesson]:
    """The same lessons in another order."""
    return [lessons[place] for place in rng.permutation(len(lessons)).tolist()]


def visited(of: Rules) -> Tree:
    """A tree in which every tick was a price that was paid."""
    ticks = [cell * of.ticks.tick for cell in range(of.ticks.cells)]
    return learn(Tree.fresh(), (Won(price, 0.5, FIRST, rounds=0) for price in ticks), of)
