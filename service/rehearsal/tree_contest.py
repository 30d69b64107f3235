"""Trees of exponential weights in a table of regret, one run at a time.

As published, a tree knows the number of rounds and the width of its best interval, and its
law is renewed after every round. As the service runs it, it knows neither and doubles, and
one law serves several bids.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence

import numpy as np
from numpy.random import Generator

from service.learner import exptree_bounds as bounds
from service.learner.exptree import law, learn
from service.learner.exptree_law import Law
from service.learner.exptree_lessons import Lesson, Lost, Won, Worth
from service.learner.exptree_rules import Rules
from service.learner.exptree_state import Tree
from service.learner.partition import Ticks
from service.rehearsal.worlds import SCALE, Shares, Stage, World

TREE, TREE_WINS = "exptree, T known", "exptree-win-only, T known"
DOUBLING, DOUBLING_WINS = "exptree", "exptree-win-only"
TREES = (TREE, TREE_WINS, DOUBLING, DOUBLING_WINS)
WINS_ONLY = (TREE_WINS, DOUBLING_WINS)
KNOWN = (TREE, TREE_WINS)
EPOCH = 8  # Bids from one law where the tree doubles.


def tree_rules(method: str, stage: Stage, rounds: int) -> Rules:
    """The game of one of `TREES` on a market."""
    win_only, rate = method in WINS_ONLY, None
    if method in KNOWN:
        rate_of = bounds.win_only_rate if win_only else bounds.exptree_rate
        rate = rate_of(rounds, stage.width)
    return Rules(Ticks(SCALE, SCALE // stage.cells), SCALE, win_only, rate)


def play_tree(world: World, method: str, stage: Stage, rng: Generator) -> Shares:
    """The regret of each run, in scales."""
    rounds, runs = world.competing.shape
    epoch = 1 if method in KNOWN else EPOCH
    won = np.stack(
        [_wins(world, run, tree_rules(method, stage, rounds), epoch, rng) for run in range(runs)],
        axis=1,
    )
    lost = [world.lost(turn, won[turn]) for turn in range(rounds)]
    return np.asarray(np.sum(lost, axis=0) / SCALE)


def _wins(world: World, run: int, rules: Rules, epoch: int, rng: Generator) -> Sequence[bool]:
    # A tree must bid above a price, and `competing` is the least bid that wins.
    prices = (world.competing[:, run] - 1).tolist()
    values, delays = world.values[:, run].tolist(), world.delays[:, run].tolist()
    due, tree, won = defaultdict[int, list[Lesson]](list), Tree.fresh(), list[bool]()
    now = law(tree, rules)
    lessons = list[Lesson]()
    for turn, price in enumerate(prices):
        if turn % epoch == 0 and turn:
            tree = learn(tree, lessons, rules)
            now, lessons = law(tree, rules), []
        bid = now.draw(rng)
        won.append(bid > price)
        if bid > price:
            due[turn + delays[turn]].append(_worth(now, price, values[turn]))
            lessons.append(Won(price, now.chance_above(price), now.stage))
        else:
            lessons.append(Lost(price, now.stage))
        lessons += due.pop(turn, [])
    return won


def _worth(now: Law, price: int, value: int) -> Worth:
    return Worth(price, now.chance_above(price), now.stage, value)
