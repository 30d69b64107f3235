"""Published growth and bounds, for exactly the markets they are stated for."""

from __future__ import annotations

import math

import pytest

from service.rehearsal import contest, theory, tree_contest, worlds
from service.rehearsal.regret_table import METHODS

MOVING = (worlds.DRIFT, worlds.ABRUPT, worlds.LATE)


@pytest.mark.parametrize("market", MOVING)
@pytest.mark.parametrize("method", METHODS)
def test_nothing_is_claimed_for_what_moves_or_comes_late(method: str, market: str) -> None:
    """No theorem was found for the best bid of each segment, nor for late values in auctions."""
    assert theory.bound(method, market, 1000) == theory.NO_BOUND
    assert theory.growth(method, market) is None


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("market", sorted(set(worlds.STAGES) - set(MOVING)))
def test_a_bound_comes_with_its_growth_and_none_without(method: str, market: str) -> None:
    """Growth without a bound is only that which is a lower bound."""
    bound, growth = theory.bound(method, market, 1000), theory.growth(method, market)
    if bound != theory.NO_BOUND:
        assert growth is not None
    elif growth is not None:
        assert growth is theory.LINEAR
        assert method in (contest.GREEDY, contest.EXP3)


def test_bounds_are_the_published_figures() -> None:
    """
    1,489.768876 and, at that gap, the same for UCBid at 10,000 rounds (Weed, Perchet, Rigollet,
    Theorem 1); 1,051.304354 and, our own, 743.3844378 for trees at a width of a thousandth;
    twice 2 sqrt((e-1) 11 T ln 11) for EXP3.
    """
    at = 10_000
    assert theory.bound(contest.UCBID, worlds.IID, at) == pytest.approx(1489.768876, abs=1e-6)
    assert theory.bound(contest.UCBID, worlds.HOSTILE, at) == pytest.approx(1489.768876, abs=1e-6)
    narrow = worlds.COIN_NARROW
    tree = theory.bound(tree_contest.TREE, narrow, at)
    assert tree == pytest.approx(1051.304354, abs=1e-6)
    wins = theory.bound(tree_contest.TREE_WINS, narrow, at)
    assert wins == pytest.approx(743.3844378, abs=1e-7)
    grid = 4.0 * math.sqrt((math.e - 1.0) * 11 * at * math.log(11))
    assert theory.bound(contest.EXP3, worlds.IID, at) == pytest.approx(grid, rel=1e-12)
    assert theory.bound(contest.KL, worlds.IID, at) == theory.ORDER_ONLY


@pytest.mark.parametrize("market", [worlds.COIN_WIDE, worlds.COIN_NARROW, worlds.SMALL])
def test_the_grid_has_no_bound_where_the_best_bid_is_not_on_it(market: str) -> None:
    """Its own bound is against the best bid of the grid."""
    assert theory.bound(contest.EXP3, market, 1000) == theory.NO_BOUND


def test_the_exponent_of_a_power_is_the_power() -> None:
    """Exactly on a power, between on a logarithm, and not a number where nothing was lost."""
    horizons = [1000, 4000, 16_000]
    for power in (0.25, 0.5, 1.0):
        assert theory.exponent(horizons, [3.0 * t**power for t in horizons]) == pytest.approx(power)
    squares = [math.log(t) ** 2 for t in horizons]
    assert 0.2 < theory.exponent(horizons, squares) < 0.3
    assert math.isnan(theory.exponent(horizons, [1.0, 0.0, 2.0]))
    assert math.isnan(theory.exponent([1000], [1.0]))
