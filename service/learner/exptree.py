"""Learning a tree of exponential weights from outcomes, and the law it bids by.

ExpTree: Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016,
Algorithm 2 and Theorem 9. The win-only variant is our own derivation, not published.
The theorems let every outcome teach before the next bid. Here the law is frozen for an
epoch and outcomes may come late, for which no theorem of theirs speaks.
"""

from __future__ import annotations

from bisect import bisect_left, insort
from collections.abc import Iterable
from itertools import accumulate

import numpy as np

from service.learner.exptree_bounds import UNITS
from service.learner.exptree_law import Law
from service.learner.exptree_lessons import CHANCE_MIN, Lesson, Lost, Won, Worth, check
from service.learner.exptree_rules import Rules, Stage
from service.learner.exptree_state import Tree
from service.learner.partition import narrowest


def learn(tree: Tree, lessons: Iterable[Lesson], rules: Rules) -> Tree:
    """
    Add lessons to a tree, each in one addition; pure, and the same in any order.

    A stage that is over has its weights set back to one and its cuts kept, as published;
    lessons of bids from before that come later only cut.

    Raises:
        BadLesson: A number outside its range; the tree given is as it was.
    """
    growing = _Growing(tree, rules)
    for lesson in lessons:
        growing.take(lesson)
    return growing.grown()


def law(tree: Tree, rules: Rules) -> Law:
    """
    What to draw bids from until the next law: weight times width, interval by interval.

    The masses are whole parts of 2^-40, rounded down, and each cell has one unit more, so
    that every price below the top can be beaten.
    """
    stage, cells = tree.stage, rules.ticks.cells
    forced = round(rules.forced_at(stage) * UNITS)
    # The cells are kept back for the one unit that each of them gets on top.
    free = max(UNITS - forced - cells, 0)
    ends = [*(tick for tick, _ in tree.steps), cells]
    logs = list(accumulate((step for _, step in tree.steps), initial=0))
    # Only ratios count, and the exponential of a large log-weight would overflow.
    highest = max(logs)
    weights = np.exp(np.array([float(log - highest) for log in logs]) / UNITS)
    share = weights / (weights @ np.diff(ends, prepend=0))
    masses = 1 + np.floor(share * free).astype(np.int64)
    # Neighbours of one mass are one run, which keeps the law short.
    last = np.flatnonzero(np.append(np.diff(masses) != 0, True)).tolist()
    return Law(
        *(rules.ticks, stage, forced),
        tuple(ends[run] for run in last),
        tuple(masses[last].tolist()),
    )


class _Growing:
    """A tree while lessons are added, with what the additions need at hand."""

    def __init__(self, tree: Tree, rules: Rules) -> None:
        self._rules = rules
        self._rounds, self._stage = tree.rounds, tree.stage
        self._steps = dict(tree.steps)
        self._cuts = [tick for tick, _ in tree.steps]
        self._narrowest = narrowest(self._cuts, rules.ticks.cells)
        self._lessons, self._counted = tree.lessons, tree.counted
        self._beyond, self._unweighed = tree.beyond, tree.unweighed

    def take(self, lesson: Lesson) -> None:
        check(lesson)
        if isinstance(lesson, Won):
            self._won(lesson)
        elif isinstance(lesson, Lost):
            self._lost(lesson)
        elif isinstance(lesson, Worth):
            self._worth(lesson)
        self._rounds += 0 if isinstance(lesson, Worth) else lesson.rounds
        self._reach(self._rules.stage_due(self._rounds, self._narrowest))

    def grown(self) -> Tree:
        steps = tuple((tick, self._steps[tick]) for tick in self._cuts)
        counts = (self._lessons, self._counted, self._beyond, self._unweighed)
        return Tree(self._rounds, self._stage, steps, *counts)

    def _won(self, won: Won) -> None:
        if won.chance is None or won.stage is None:
            self._unweighed += 1
        elif won.price >= self._rules.ticks.top or won.chance < CHANCE_MIN:
            self._beyond += 1
        else:
            units = self._rules.of_win(won.price, won.chance, won.stage)
            self._teach(won.price, won.stage, units)

    def _lost(self, lost: Lost) -> None:
        if self._rules.win_only:
            return
        if lost.price is None or lost.stage is None:
            self._unweighed += 1
        elif lost.price >= self._rules.ticks.top:
            self._beyond += 1
        else:
            self._teach(lost.price, lost.stage, self._rules.of_loss(lost.stage))

    def _worth(self, worth: Worth) -> None:
        if worth.chance is None or worth.stage is None:
            return
        if worth.price >= self._rules.ticks.top or worth.chance < CHANCE_MIN:
            return
        self._cut(worth.price, worth.stage)
        if worth.stage == self._stage:
            # Rounded one by one, so that a correction takes off to the unit what was once added.
            for amount, sign in ((worth.amount, 1), (worth.was, -1)):
                units = self._rules.of_value(amount, worth.chance, worth.stage)
                self._add(worth.price, units, sign)

    def _teach(self, price: int, stage: Stage, units: int) -> None:
        self._cut(price, stage)
        self._lessons += 1
        if stage == self._stage:
            self._counted += 1
            self._add(price, units, 1)

    def _cut(self, price: int, stage: Stage) -> None:
        self._reach(stage)
        for tick in self._rules.ticks.cuts(price):
            if tick not in self._steps:
                self._steps[tick] = 0
                self._narrow(tick)

    def _narrow(self, tick: int) -> None:
        place = bisect_left(self._cuts, tick)
        left = self._cuts[place - 1] if place else 0
        right = self._cuts[place] if place < len(self._cuts) else self._rules.ticks.cells
        self._narrowest = min(self._narrowest, tick - left, right - tick)
        insort(self._cuts, tick)

    def _add(self, price: int, units: int, sign: int) -> None:
        # Inside a cell the credit is shared: so much of it goes to the cell as bids are
        # above the price, which is what the cell earns on average, and the rest beyond it.
        cell, above, bids = self._rules.ticks.place(price)
        within = units * above // bids
        for tick, step in ((cell, within), (cell + 1, units - within)):
            # A credit to all bids, or to none, moves no ratio and has no cut.
            if tick in self._steps:
                self._steps[tick] += sign * step

    def _reach(self, stage: Stage) -> None:
        # The larger of each, whichever of two outcomes comes first.
        furthest = (max(self._stage[0], stage[0]), max(self._stage[1], stage[1]))
        if furthest != self._stage:
            self._stage, self._counted = furthest, 0
            self._steps = dict.fromkeys(self._steps, 0)
