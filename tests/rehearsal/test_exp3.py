"""The baseline on a fixed grid of bids, against worked figures and exact expectations.

EXP3 and EXP3.P: Auer, Cesa-Bianchi, Freund, Schapire, "The Nonstochastic Multiarmed Bandit
Problem", SIAM Journal on Computing 32(1):48-77, 2002. The figures were computed apart from
this code, by the formulas, which were written from memory of that paper.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from service.rehearsal import exp3
from service.rehearsal.hindsight import best_fixed_bid, surplus_of
from service.rehearsal.market import Path

ARMS, ROUNDS, RISK = 10, 10_000, 0.05
SCALE = 10**9
GRID = np.arange(11) * (SCALE // 10)


def test_check_values_of_exp3() -> None:
    """Ten digits for 10 arms and 10,000 rounds, rewards between 0 and 1."""
    rate = exp3.exp3_rate(ARMS, ROUNDS)

    assert rate == pytest.approx(0.03660670553, rel=1e-9)
    assert exp3.exp3_bound(ARMS, ROUNDS) == pytest.approx(1258.012738, rel=1e-9)
    assert exp3.exp3_bound_at(rate, ARMS, ROUNDS) == pytest.approx(1258.012738, rel=1e-9)
    assert exp3.exp3_bound(ARMS, ROUNDS) <= 2.63 * math.sqrt(ROUNDS * ARMS * math.log(ARMS))


def test_check_values_of_exp3p() -> None:
    """Eight digits for 10 arms, 10,000 rounds and a risk of 0.05."""
    assert exp3.exp3p_rate(ARMS, ROUNDS) == pytest.approx(0.07433844378, rel=1e-9)
    assert exp3.exp3p_bonus(ARMS, ROUNDS, RISK) == pytest.approx(7.6180464, rel=1e-8)
    assert exp3.exp3p_start(ARMS, ROUNDS, RISK) == pytest.approx(391.298497, rel=1e-8)
    assert exp3.exp3p_bound(ARMS, ROUNDS, RISK) == pytest.approx(7412.092977, rel=1e-9)


@pytest.mark.parametrize(("rounds", "says_something"), [(5300, False), (5500, True)])
def test_where_the_bound_of_exp3p_begins_to_speak(rounds: int, says_something: bool) -> None:
    """Below about 5,400 rounds it is larger than all that can be lost."""
    assert (exp3.exp3p_bound(ARMS, rounds, RISK) < rounds) is says_something


def test_rates_are_cut_for_few_rounds() -> None:
    """At 1, and at 3/5 for EXP3.P."""
    assert exp3.exp3_rate(ARMS, 1) == 1.0
    assert exp3.exp3p_rate(ARMS, 1) == 0.6


def test_one_step_of_exp3() -> None:
    """Three arms, rate 0.3, equal weights, the first returns 0.6; the second run another."""
    learner = exp3.Exp3(runs=2, arms=3, rate=0.3)
    assert learner.chances() == pytest.approx(np.full((2, 3), 1 / 3), rel=1e-12)

    learner.learn(np.array([0, 2]), np.array([0.6, 0.0]))
    assert learner.weights[0].tolist() == pytest.approx([1.197217363, 1.0, 1.0], rel=1e-9)
    chances = learner.chances()
    assert chances[0].tolist() == pytest.approx(
        [0.3621192303, 0.3189403849, 0.3189403849], rel=1e-9
    )
    assert chances[1].tolist() == pytest.approx([1 / 3] * 3, rel=1e-12)


def test_two_steps_of_exp3p() -> None:
    """Every arm is lifted by bonus / (p sqrt(K T)), the one played by its reward / p as well."""
    bonus, rate = exp3.exp3p_bonus(3, 100, RISK), exp3.exp3p_rate(3, 100)
    learner = exp3.Exp3(1, 3, rate, lift=bonus / math.sqrt(300))
    weights, start = [1.0] * 3, exp3.exp3p_start(3, 100, RISK)
    weights = [start * weight for weight in weights]
    for arm, reward in ((1, 0.8), (2, 0.25)):
        odds = [(1 - rate) * weight / sum(weights) + rate / 3 for weight in weights]
        assert learner.chances()[0].tolist() == pytest.approx(odds, rel=1e-12)
        learner.learn(np.array([arm]), np.array([reward]))
        gains = [reward / odds[i] * (i == arm) + bonus / (odds[i] * 300**0.5) for i in range(3)]
        weights = [w * math.exp(rate / 9 * gain) for w, gain in zip(weights, gains, strict=True)]

    assert (start * learner.weights[0]).tolist() == pytest.approx(weights, rel=1e-12)


def test_arms_are_drawn_with_their_chances() -> None:
    """A chi-square test over 30,000 runs of one state."""
    learner = exp3.Exp3(30_000, 3, 0.3)
    learner.learn(np.zeros(30_000, np.int64), np.ones(30_000))
    seen = np.bincount(learner.draw(np.random.default_rng(8)), minlength=3)

    assert stats.chisquare(seen, 30_000 * learner.chances()[0]).pvalue > 0.001


@pytest.mark.parametrize("risk", [None, RISK])
def test_both_find_the_best_of_ten_arms(risk: float | None) -> None:
    """One pays 0.9 on average, nine 0.1: below the bounds, and below half of blind choice."""
    runs, rng = 20, np.random.default_rng(2002)
    if risk is None:
        learner = exp3.Exp3(runs, ARMS, exp3.exp3_rate(ARMS, ROUNDS))
        bound = exp3.exp3_bound(ARMS, ROUNDS)
    else:
        lift = exp3.exp3p_bonus(ARMS, ROUNDS, risk) / math.sqrt(ARMS * ROUNDS)
        learner = exp3.Exp3(runs, ARMS, exp3.exp3p_rate(ARMS, ROUNDS), lift)
        bound = exp3.exp3p_bound(ARMS, ROUNDS, risk)
    lost = np.zeros(runs)
    for _ in range(ROUNDS):
        arms = learner.draw(rng)
        means = np.where(arms == 3, 0.9, 0.1)
        lost += 0.9 - means
        learner.learn(arms, (rng.random(runs) < means).astype(np.float64))

    assert lost.max() < bound
    assert lost.max() < 0.5 * 0.72 * ROUNDS


def test_no_bid_of_the_grid_earns_between_its_points() -> None:
    """
    A good impression a hair above 0.5 or a worthless one a hair below 0.6, each as often:
    a bid between them earns 0.2375 a round, any of the grid 0 or loses 0.05. Weed, Perchet,
    Rigollet, "Online learning in repeated auctions", COLT 2016, Proposition 11.
    """
    prices = np.array([525_000_000, 575_000_000])
    values = np.array([SCALE, 0])

    best = best_fixed_bid(prices, values)
    assert best.surplus / 2 / SCALE == pytest.approx(0.2375, abs=1e-12)
    assert prices[0] <= best.bid < prices[1]
    earned = [surplus_of(prices, values, bid) / 2 / SCALE for bid in GRID.tolist()]
    assert earned == pytest.approx([0.0] * 6 + [-0.05] * 5, abs=1e-12)


def test_a_game_counts_what_its_bids_earn() -> None:
    """With one bid on the grid there is nothing to choose, and runs are kept apart."""
    paths = [
        Path(np.array([3, 7, 8]), np.array([9, 9, 1])),
        Path(np.array([6, 1, 8]), np.array([2, 2, 9])),
    ]
    rng = np.random.default_rng(1)

    assert exp3.play_exp3(paths, np.array([7]), 10, rng).tolist() == [8, -3]
