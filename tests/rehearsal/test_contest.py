"""Bidders of the table of regret against exact expectations and against their own recursion."""

from __future__ import annotations

import math

import numpy as np
import pytest

from service.rehearsal import contest, worlds
from service.rehearsal.regret import uniform_regret, uniform_terms
from service.rehearsal.worlds import SCALE, STAGES, World

# Simulated apart from this code: 10,000 rounds, 400 runs, uniform prices, mean value 0.3.
BAND, BAND_ERROR = 58.4, 0.5
RUNS = 40


def ground(market: str, rounds: int, runs: int = RUNS) -> World:
    """Seeded runs of one market."""
    return worlds.world([STAGES[market]], rounds, runs, 5)


@pytest.mark.parametrize(("bidder", "method"), [("ucbid", "ucbid"), ("thompson", "thompson")])
def test_counting_by_prices_agrees_with_counting_by_expectation(bidder: str, method: str) -> None:
    """Within four standard errors of the figure that takes out the luck of prices as well."""
    rng = np.random.default_rng(1)
    counted = contest.play(ground(worlds.IID, 1000), contest.BIDDERS[bidder](RUNS, 1000, rng))
    exact = uniform_regret(uniform_terms(method), worlds.VALUE, 1000, RUNS, rng)

    error = math.sqrt((counted.var() + exact.var()) / RUNS)
    assert abs(counted.mean() - exact.mean()) <= 4.0 * error


def test_ucbid_lies_in_its_simulated_band() -> None:
    """58.4 ± 0.5 scales at 10,000 rounds, a figure simulated apart from this code."""
    regret = contest.play(
        ground(worlds.IID, 10_000, 20),
        contest.BIDDERS[contest.UCBID](20, 10_000, np.random.default_rng(2)),
    )

    error = math.hypot(float(regret.std(ddof=1)) / math.sqrt(20), BAND_ERROR)
    assert abs(regret.mean() - BAND) <= 4.0 * error


def bids_after(hits: list[int], **forgetting: float) -> list[float]:
    """The bids of ucbid that wins every round of one run, as shares, one more than the hits."""
    rounds = len(hits)
    zeros = np.zeros((rounds, 1), np.int32)
    values = np.asarray(hits, np.int32)[:, np.newaxis] * np.int32(SCALE)
    always = World(zeros + 1, values, zeros, zeros)
    learner = contest.Learner("ucbid", 1, np.random.default_rng(0), **forgetting)  # type: ignore[arg-type]
    bids = [float(learner.bids(0)[0]) / SCALE]
    for turn in range(rounds):
        learner.learn(turn, np.array([True]), always)
        bids.append(float(learner.bids(turn + 1)[0]) / SCALE)
    return bids


def test_discounting_is_the_plain_recursion() -> None:
    """N = gamma N + 1 and X = gamma X + reward: after 1, 0, 0, 1 the check values of the source."""
    hits = [1, 0, 0, 1, *([0] * 400)]
    count, total = 0.0, 0.0
    for hit, bid in zip(hits, bids_after(hits, gamma=0.99)[1:], strict=True):
        count, total = 0.99 * count + 1.0, 0.99 * total + hit
        bonus = math.sqrt(3.0 * math.log(count + 1.0) / (2.0 * count))
        assert bid == pytest.approx(min(total / count + bonus, 1.0), abs=2e-9)


def test_a_window_knows_its_last_rounds_only() -> None:
    """After a window of nothing it bids as one that never saw the hits before."""
    bids = bids_after([1] * 50 + [0] * 30, window=30)
    bonus = math.sqrt(3.0 * math.log(31.0) / 60.0)

    assert bids[-1] == pytest.approx(bonus, abs=2e-9)
    assert bids[-2] == pytest.approx(1.0 / 30.0 + bonus, abs=2e-9)


def test_late_values_count_when_they_come() -> None:
    """A value three rounds late leaves the bid at the cap for three rounds more."""
    one = np.ones((6, 1), np.int32)
    late = World(one, 0 * one, 0 * one, 3 * one)
    learner = contest.Learner("mean", 1, np.random.default_rng(0))
    bids = []
    for turn in range(6):
        bids.append(int(learner.bids(turn)[0]))
        learner.learn(turn, np.array([True]), late)

    assert bids == [SCALE, SCALE, SCALE, SCALE, 0, 0]


def test_the_grid_learns_late_what_it_would_have_learnt_at_once() -> None:
    """With values at once it is EXP3 itself; late ones cost, and the best point is still found."""
    rng = np.random.default_rng(4)
    at_once = contest.play(ground(worlds.IID, 3000), contest.Grid(RUNS, 3000, rng))
    late = contest.play(ground(worlds.LATE, 3000), contest.Grid(RUNS, 3000, rng))

    # A point of the grid by chance loses the mean of (b - 0.3)^2 / 2 a round, which is 0.07.
    assert 0.0 < at_once.mean() < 0.85 * 3000 * 0.07
    assert 0.0 < late.mean() < 0.85 * 3000 * 0.07


def test_baselines_that_explore_bid_the_cap_as_often_as_they_say() -> None:
    """The first ceil(sqrt(T)) rounds, and with chance 25 / t."""
    rng = np.random.default_rng(9)
    first = contest.BIDDERS[contest.EXPLORE](1, 100, rng)
    tries = contest.BIDDERS[contest.EPSILON](4000, 100, rng)
    one = np.ones((1, 1), np.int32)
    first.learn(0, np.array([True]), World(one, 0 * one, 0 * one, 0 * one))

    assert [int(first.bids(turn)[0]) for turn in (5, 9, 10, 99)] == [SCALE, SCALE, 0, 0]
    zeros = np.zeros((1, 4000), np.int32)
    tries.learn(0, np.ones(4000, np.bool_), World(zeros + 1, zeros, zeros, zeros))
    share = float((tries.bids(99) == SCALE).mean())
    assert share == pytest.approx(0.25, abs=4.0 * math.sqrt(0.25 * 0.75 / 4000))
