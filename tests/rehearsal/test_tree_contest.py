"""Trees in the table of regret: their rules, late values, and one small game against chance."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner import exptree_bounds as bounds
from service.rehearsal import tree_contest, worlds
from service.rehearsal.worlds import SCALE, STAGES, World

COIN = STAGES[worlds.COIN_WIDE]


@pytest.mark.parametrize("method", tree_contest.TREES)
def test_a_tree_is_told_the_rounds_only_where_its_name_says_so(method: str) -> None:
    """The rate of Theorem 5, or our own of wins alone; None where it doubles."""
    rules = tree_contest.tree_rules(method, COIN, 4000)
    expected = {
        tree_contest.TREE: bounds.exptree_rate(4000, 0.05),
        tree_contest.TREE_WINS: bounds.win_only_rate(4000, 0.05),
    }

    assert rules.rate == expected.get(method)
    assert rules.win_only == ("win-only" in method)
    assert rules.ticks.cells == 40
    assert rules.scale == SCALE


@pytest.mark.parametrize("method", tree_contest.TREES)
def test_a_tree_loses_less_than_chance_even_when_values_are_late(method: str) -> None:
    """A uniform bid loses the integral of (b - 0.3)^2 / 2 a round, 0.0617 scales."""
    late = STAGES[worlds.LATE]
    rng = np.random.default_rng(6)
    regret = tree_contest.play_tree(worlds.world([late], 1500, 2, 5), method, late, rng)

    assert regret.shape == (2,)
    assert 0.0 < regret.mean() < 0.85 * 1500 * 0.0617


def test_values_that_never_come_teach_nothing() -> None:
    """Wins whose values stay out look worthless, and a tree of wins alone avoids them."""
    rounds = 600
    one = np.ones((rounds, 1), np.int32)
    price, worth = one * (SCALE // 2) + 1, one * SCALE
    told = World(price, worth, worth - price, 0 * one)
    kept = World(price, worth, worth - price, one * rounds)
    stage = STAGES[worlds.IID]
    regrets = [
        tree_contest.play_tree(each, tree_contest.TREE_WINS, stage, np.random.default_rng(8))
        for each in (told, kept)
    ]

    assert regrets[0][0] < 0.25 * rounds * 0.5 < regrets[1][0]
