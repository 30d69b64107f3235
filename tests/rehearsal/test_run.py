"""The way of production and the way over many seeds come to the same prices and money."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from scipy import stats

from service.decision.counts import nothing
from service.decision.methods import METHODS
from service.decision.terms import Terms
from service.learner import bounds
from service.rehearsal.market import BernoulliValues, Market, Path, UniformBids
from service.rehearsal.rare import BLOCK, rare_paths, rare_terms
from service.rehearsal.regret import SCALE, uniform_terms
from service.rehearsal.run import bids_of, play, play_fixed, play_many

UNIFORM = Market(UniformBids(0, SCALE), BernoulliValues(0.3, SCALE))
ROUNDS = 400


def invented_path(seed: int = 11) -> Path:
    """A short sequence of opportunities on the unit scale."""
    return UNIFORM.path(np.random.default_rng(seed), ROUNDS)


def unit_terms(method: str) -> Terms:
    """Terms on the unit scale with a prior of one conversion, for any method."""
    settings = {"price": SCALE // 3} if method == "flat" else {}
    plain = uniform_terms(method, **settings)
    return dataclasses.replace(plain, prior_conversions=1.0, expected=SCALE // 2)


def by_formula(method: str, t: int, known: int, amount: int) -> float:
    """The published formulas on plain numbers, as shares of the scale, apart from the service."""
    mean = amount / known / SCALE if known else 0.0
    if method == "flat":
        return 1 / 3
    if method == "mean":
        return (1.0 + amount / SCALE) / (2.0 + known)
    if method == "ucbid":
        return min(1.0, mean + math.sqrt(3.0 * math.log(t) / (2.0 * known))) if known else 1.0
    if method == "kl-ucbid":
        return float(bounds.kl_upper(mean, 1.01 * math.log(t) / known)) if known else 1.0
    if method == "bernstein-ucbid" and known:
        level, variance = math.log(3.0) + 2.01 * math.log(t), mean - mean * mean
        bonus = math.sqrt(2.0 * variance * level / known) + 3.0 * level / known
        return min(1.0, mean + bonus)
    if method == "bernstein-ucbid":
        return 1.0
    if method == "linear":  # Nothing is known of an impression: its vector is the constant 1.
        radius = 0.5 * math.sqrt(math.log(1.0 + known) + 2.0 * math.log(20.0)) + 1.0
        return min(1.0, amount / SCALE / (1.0 + known) + radius / math.sqrt(1.0 + known))
    conversions = 1.0 + amount / SCALE
    if method == "bayes-ucb":
        failures = 1.0 + known - amount / SCALE
        return float(stats.beta.ppf(1.0 - 1.0 / max(t, 2), conversions, failures))
    rate = float(stats.gamma.ppf(0.75, conversions, scale=1.0 / (2.0 + known)))
    return min(1.0, rate * (1.0 + amount / SCALE) / conversions)


INDICES = sorted(set(METHODS) - {"thompson", "exptree", "exptree-win-only"})


@pytest.mark.parametrize("method", INDICES)
@pytest.mark.parametrize("arrival", ["once", "accrues"])
@pytest.mark.parametrize("block", [1, 7])
def test_production_prices_are_the_formulas(method: str, arrival: str, block: int) -> None:
    """Fold, snapshot and proposal give the price of the formula, rounded down to a nano."""
    path = invented_path()
    terms = dataclasses.replace(unit_terms(method), arrival=arrival)
    played = play(path, terms, block, np.random.default_rng(0))
    known = amount = 0
    for number, price in enumerate(played.prices):
        rounds = number * block
        wanted = by_formula(method, rounds + 1, known, amount) * SCALE
        assert price == pytest.approx(wanted, abs=1.01), f"after {rounds} rounds"
        now = slice(rounds, rounds + block)
        won = path.competing[now] <= price
        known, amount = known + int(won.sum()), amount + int(path.values[now][won].sum())
    assert (played.tally.known, played.tally.amount) == (known, amount)


@pytest.mark.parametrize("method", INDICES)
def test_many_seeds_at_once_earn_what_production_earns(method: str) -> None:
    """Four sequences played together earn, to a nano a round, what each earns alone."""
    paths = [invented_path(seed) for seed in range(4)]
    together = play_many(paths, unit_terms(method), 5)
    alone = [play(path, unit_terms(method), 5, np.random.default_rng(0)).surplus for path in paths]

    assert together.tolist() == pytest.approx(alone, abs=ROUNDS)


def test_drawn_bids_are_drawn_for_every_opportunity() -> None:
    """Within one block no two draws of Thompson's are alike, in production and over many seeds."""
    played = play(invented_path(), unit_terms("thompson"), 50, np.random.default_rng(3))
    bids = bids_of(nothing(3), unit_terms("thompson"), 50, np.random.default_rng(3))

    assert len(set(played.prices)) == ROUNDS
    assert np.unique(bids).size == bids.size == 150


@pytest.mark.parametrize("method", ["exptree", "exptree-win-only"])
def test_a_tree_learns_through_production(method: str) -> None:
    """With every competing bid at 0.4 and every value at 0.9, bids below 0.4 die out."""
    rounds = 3000
    competing = np.full(rounds, 4 * SCALE // 10, dtype=np.int64)
    path = Path(competing, np.full(rounds, 9 * SCALE // 10, dtype=np.int64))
    terms = unit_terms(method)
    assert terms.tree is not None
    played = play(path, terms, 10, np.random.default_rng(3))
    below = np.array(played.prices) < 4 * SCALE // 10

    assert below[:200].mean() > 0.15
    assert below[-500:].mean() < 0.1


@pytest.mark.parametrize("method", ["posterior-quantile", "kl-ucbid"])
def test_the_rare_case_is_the_same_through_production(method: str) -> None:
    """The table of the rare-value case stands for the code that bids: same surplus to a nano."""
    paths = rare_paths([0])
    terms = rare_terms(method)
    played = play(paths[0], terms, BLOCK, np.random.default_rng(0))

    assert played.surplus == pytest.approx(int(play_many(paths, terms, BLOCK)[0]), abs=50_000)
    assert played.tally.rounds == 50_000
    assert played.spent == played.tally.paid


def test_a_tie_is_won() -> None:
    """A bid equal to the competing bid wins and pays it, as in Achddou, Cappé, Garivier."""
    path = Path(np.array([5, 6], dtype=np.int64), np.array([9, 9], dtype=np.int64))
    flat = dataclasses.replace(unit_terms("flat"), settings={"price": 5})
    played = play(path, flat, 1, np.random.default_rng(0))

    assert (played.wins, played.spent, played.surplus) == (1, 5, 4)
    assert play_fixed([path], 5).tolist() == [4]
