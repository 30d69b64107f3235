"""First-price bids against closed forms, worked numbers, and what hindsight would have earned.

Closed forms and revenues are of Krishna, "Auction Theory" (textbook); the exponential form is
solved from the first-order condition. Numbers were computed apart from this code.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import bounds, shading
from service.learner.arrays import Numbers

GRID = np.arange(1, 21) / 20
Law = Callable[[np.random.Generator, int], Numbers]
LAWS: dict[str, Law] = {
    "uniform": lambda rng, count: rng.random(count),
    "square": lambda rng, count: rng.random(count) ** 2,
    "lognormal": lambda rng, count: 0.3 * np.exp(0.5 * rng.standard_normal(count)),
}


@pytest.mark.parametrize("value", [0.1, 0.5, 0.8, 1.0])
def test_half_the_value_against_a_uniform_rival(value: float) -> None:
    """The search finds v / 2, and the closed form is it."""
    found = shading.refined(lambda b: np.clip(b, 0, 1), value, 1.0)
    assert found == pytest.approx(float(shading.uniform_bid(value)), abs=1e-6)


@pytest.mark.parametrize(
    ("bidders", "bid", "utility"), [(2, 0.4, 0.32), (3, 1.6 / 3, 0.1706666667)]
)
def test_the_power_law(bidders: int, bid: float, utility: float) -> None:
    """v (n - 1) / n and utility v^n / n at v = .8, where the rivals bid by the equilibrium too."""
    assert float(shading.power_bid(0.8, bidders)) == pytest.approx(bid)
    share = (bid * bidders / (bidders - 1)) ** (bidders - 1)
    assert (0.8 - bid) * share == pytest.approx(utility, abs=1e-9)
    found = shading.refined(lambda b: np.clip(b, 0, 1) ** (bidders - 1), 0.8, 1.0)
    assert found == pytest.approx(bid, abs=1e-6)


@pytest.mark.parametrize("rate", [0.01, 1.0, 3.0, 50.0])
@pytest.mark.parametrize("value", [0.2, 1.0, 7.0])
def test_the_exponential_law(value: float, rate: float) -> None:
    """Lambert's W gives what the search finds, without overflow."""
    found = shading.refined(lambda b: -np.expm1(-rate * b), value, value)
    assert float(shading.exponential_bid(value, rate)) == pytest.approx(found, abs=1e-5 * value)


def test_the_exponential_law_at_one() -> None:
    """2 - W(e^2) = 0.442854401, utility 0.1993463031."""
    bid = float(shading.exponential_bid(1.0, 1.0))
    assert bid == pytest.approx(0.442854401, abs=1e-9)
    assert (1.0 - bid) * -np.expm1(-bid) == pytest.approx(0.1993463031, abs=1e-10)
    assert float(shading.exponential_bid(1e6, 1.0)) == pytest.approx(np.log(1e6 + 1), abs=1e-3)


def test_the_bid_under_a_reserve() -> None:
    """v/2 + r^2/(2v) = 0.55625 at v = .8, r = .5."""
    assert float(shading.reserve_bid(0.8, 0.5)) == pytest.approx(0.55625)


@pytest.mark.parametrize(
    ("bidders", "reserve", "revenue"),
    [
        (2, 0.0, 0.3333333333),
        (3, 0.0, 0.5),
        (5, 0.0, 0.6666666667),
        (1, 0.5, 0.25),
        (2, 0.5, 0.4166666667),
        (3, 0.5, 0.53125),
    ],
)
def test_revenue_of_either_format(bidders: int, reserve: float, revenue: float) -> None:
    """(n - 1) / (n + 1), and with the best reserve, which is 1/2 for every n."""
    assert float(shading.equilibrium_revenue(bidders, reserve)) == pytest.approx(revenue, abs=1e-10)
    around = shading.equilibrium_revenue(bidders, np.array([0.49, 0.5, 0.51]))
    assert int(np.argmax(around)) == 1


def test_cross_learning_by_hand() -> None:
    """v = .8; bids .2, .4, .6; wins 2, 6, 9 of 10; t = 30: .6, .4, .2, all capped at rate 1."""
    bids, wins, trials = [0.2, 0.4, 0.6], [2, 6, 9], [10, 10, 10]
    index = shading.cross_learning_index(bids, wins, trials, 0.8, 30)
    assert index == pytest.approx([0.6, 0.4, 0.2])
    choice = shading.best(bids, np.array(wins) / 10, 0.8)
    assert int(choice.place) == 1
    assert float(choice.surplus) == pytest.approx(0.24)
    assert (0.8 - np.array(bids)) * np.array(wins) / 10 == pytest.approx([0.12, 0.24, 0.18])


def test_cross_learning_where_nothing_is_capped() -> None:
    """.5 (.2 + sqrt(2 ln 30 / 1000)) = 0.1412384, by the formula; nothing at or above v."""
    index = shading.cross_learning_index([0.3, 0.8], [200, 900], [1000, 1000], 0.8, 30)
    assert index == pytest.approx([0.5 * (0.2 + np.sqrt(2 * np.log(30) / 1000)), 0.0])
    assert index[0] == pytest.approx(0.1412384, abs=1e-7)


def test_several_tops_are_told_apart() -> None:
    """Two steps of F: which is better depends on the value, and no hill-climb could tell."""
    chance = np.where(GRID < 0.2, 0.0, np.where(GRID < 0.7, 0.3, 1.0))
    choice = shading.best(GRID, chance, np.array([0.5, 0.85, 1.0]))
    assert GRID[choice.place] == pytest.approx([0.2, 0.2, 0.7])


def test_of_equals_the_lowest_and_never_at_the_value() -> None:
    """No bid below the value means none; a chance of nought everywhere means the lowest."""
    choice = shading.best(GRID, np.zeros(20), np.array([0.5, 0.05, 0.01]))
    assert choice.place.tolist() == [0, -1, -1]
    assert choice.surplus.tolist() == [0.0, 0.0, 0.0]


@given(
    some.lists(some.tuples(some.integers(0, 40), some.integers(0, 40)), min_size=1, max_size=12),
    some.integers(1, 10_000),
)
def test_upper_ends_rise_and_only_sharpen(pairs: list[tuple[int, int]], rounds: int) -> None:
    """They rise in the bid, are no wider than each bid's own, and the KL ones than UCB1's."""
    wins = np.array([min(pair) for pair in pairs], dtype=float)
    trials = np.array([max(pair) for pair in pairs], dtype=float)
    rising = shading.rising_upper(wins, trials, rounds)
    alone = shading.chance_upper(wins, trials, rounds, "kl")
    assert (np.diff(rising) >= 0).all()
    assert (rising <= alone + 1e-12).all()
    assert (alone <= shading.chance_upper(wins, trials, rounds, "ucb1") + 1e-12).all()


def test_upper_ends_pool_what_lies_above() -> None:
    """One loss in ten bids each tells little; a hundred above that lose bind all below them."""
    wins, trials = np.array([1.0] * 11), np.array([10.0] * 10 + [100.0])
    upper = shading.rising_upper(wins, trials, 1000)
    assert upper[9] < 0.5 * float(shading.chance_upper(1.0, 10.0, 1000, "kl"))
    assert upper[-1] == pytest.approx(float(bounds.kl_upper(0.01, np.log(1000) / 100)))


def test_untried_bids_are_climbed_from_below() -> None:
    """The first bid is the lowest; once it loses often enough the next is tried, never the top."""
    wins, trials, order = np.zeros(20), np.zeros(20), []
    for rounds in range(1, 200):
        place = int(shading.best(GRID, shading.rising_upper(wins, trials, rounds), 0.9).place)
        trials[place] += 1
        order.append(place)
    firsts = [order.index(place) for place in sorted(set(order))]
    assert order[0] == 0
    assert firsts == sorted(firsts)
    assert sorted(set(order)) == list(range(len(firsts)))


@cache
def _share_earned(law: str, way: str, seed: int, rounds: int = 3000) -> tuple[float, float]:
    # Of the best fixed bid in hindsight, and the mean of what was paid over that bid.
    rng = np.random.default_rng(seed)
    competing = LAWS[law](rng, rounds)
    wins, trials, earned, paid = np.zeros(20), np.zeros(20), 0.0, []
    for t in range(rounds):
        place = _place(way, wins, trials, t + 1, rng)
        won = competing[t] <= GRID[place]
        trials[place] += 1
        wins[place] += won
        earned += (0.8 - GRID[place]) * won
        paid += [GRID[place]] * bool(won)
    surplus = (0.8 - GRID) * (competing[:, None] <= GRID).mean(axis=0)
    return earned / rounds / surplus.max(), float(np.mean(paid) / GRID[np.argmax(surplus)])


def _place(way: str, wins: Numbers, trials: Numbers, t: int, rng: np.random.Generator) -> int:
    if way == "ucb1":
        return int(np.argmax(shading.cross_learning_index(GRID, wins, trials, 0.8, t)))
    if way == "rising":
        return int(shading.best(GRID, shading.rising_upper(wins, trials, t), 0.8).place)
    if rng.random() < t ** (-1 / 3):
        return int(rng.integers(20))
    return int(shading.best(GRID, wins / np.maximum(trials, 1), 0.8).place)


@pytest.mark.parametrize("law", LAWS)
def test_win_and_loss_alone_find_the_bid(law: str) -> None:
    """Over three runs at least 85 % of hindsight, more than UCB1 and more than random trying."""
    earned = {
        way: np.mean([_share_earned(law, way, seed)[0] for seed in range(3)])
        for way in ("rising", "ucb1", "random")
    }
    assert earned["rising"] >= 0.85
    assert earned["rising"] >= earned["ucb1"]
    assert earned["rising"] >= earned["random"] - 0.005


@pytest.mark.parametrize("law", LAWS)
def test_exploring_does_not_overpay(law: str) -> None:
    """What is paid is at most 5 % above the best fixed bid; random trying pays over 8 % more."""
    runs = [[_share_earned(law, way, seed)[1] for seed in range(3)] for way in ("rising", "random")]
    rising, random = np.mean(runs, axis=1)
    assert rising <= 1.05
    assert random >= 1.08 * rising


def test_optimism_in_both_learns_value_and_curve() -> None:
    """A value of 1 in 60 % of wins, known only from wins: three quarters of what is to be had."""
    rng = np.random.default_rng(5)
    rounds, wins, trials, known, total, earned = 6000, np.zeros(20), np.zeros(20), 0, 0.0, 0.0
    for t in range(1, rounds + 1):
        mean = total / max(known, 1)
        value = float(bounds.kl_ucbid_index(mean, t, known, 1.0))
        place = int(shading.best(GRID, shading.rising_upper(wins, trials, t), value).place)
        worth, won = float(rng.random() < 0.6), rng.random() <= GRID[place]
        assert GRID[place] < value
        trials[place] += 1
        wins[place] += won
        known, total = known + bool(won), total + worth * won
        earned += (0.6 - GRID[place]) * won
    assert earned / rounds >= 0.75 * 0.09


def test_the_level_rises_with_the_rounds() -> None:
    """1 - 1/t, never below one half."""
    assert [shading.level_at(t) for t in (0, 1, 2, 4, 1000)] == [0.5, 0.5, 0.5, 0.75, 0.999]


def test_places_to_explore_are_spread_up_to_the_cap() -> None:
    """Evenly, the cap among them; all places where there are no more."""
    assert shading.exploring_places(100, 5).tolist() == [20, 40, 60, 80, 100]
    assert shading.exploring_places(3, 20).tolist() == [1, 2, 3]
