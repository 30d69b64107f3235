"""Laws that a request names: their means, ends and shapes, against numpy and scipy."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import stats

from service.rehearsal.laws import EmpiricalBids, EvenValues, ExponentialBids, bids_of, values_of

COUNT = 20_000
BIDS: list[dict[str, Any]] = [
    {"law": "uniform", "low": 100, "high": 900},
    {"law": "lognormal", "median": 1_000_000, "sigma": 0.5},
    {"law": "exponential", "mean": 1_000_000},
    {"law": "empirical", "prices": [10, 20], "chances": [0.5, 1.0], "beyond": 99},
]
VALUES: list[dict[str, Any]] = [
    {"law": "events", "chance": 0.3, "amount": 1_000_000},
    {"law": "baskets", "chance": 0.4, "mean": 1_000_000, "ceiling": 3_000_000},
    {"law": "even", "low": 0, "high": 1_000_000},
]


def rng(seed: int = 7) -> np.random.Generator:
    """The only source of chance of these tests."""
    return np.random.default_rng(seed)


@pytest.mark.parametrize("said", BIDS, ids=lambda said: str(said["law"]))
def test_a_seed_draws_the_same_competing_bids(said: dict[str, Any]) -> None:
    """Whole numbers of at least 0, the same again from the same seed and others from another."""
    first, again, other = (bids_of(said).draw(rng(seed), 500) for seed in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)
    assert first.dtype == np.int64
    assert first.min() >= 0


@pytest.mark.parametrize("said", VALUES, ids=lambda said: str(said["law"]))
def test_the_stated_mean_is_that_of_the_draws(said: dict[str, Any]) -> None:
    """Within five standard errors of 20,000 draws, since regret is counted against that mean."""
    law = values_of(said)
    drawn = law.draw(rng(), COUNT)
    error = float(drawn.std()) / np.sqrt(COUNT)
    assert float(drawn.mean()) == pytest.approx(law.mean, abs=5 * error + 1)


@pytest.mark.parametrize("read", [bids_of, values_of])
@pytest.mark.parametrize("name", ["", "Uniform", "pareto"])
def test_a_law_that_nobody_knows_is_no_law(read: Any, name: str) -> None:
    """It fails at once and is not taken for another."""
    with pytest.raises(KeyError):
        read({"law": name, "low": 0, "high": 1})


@pytest.mark.parametrize("law", ["events", "baskets", "even"])
def test_laws_of_values_are_none_of_bids(law: str) -> None:
    """The two tables are apart: a value's law cannot stand for rivals."""
    with pytest.raises(KeyError):
        bids_of({"law": law, "chance": 0.1, "amount": 1, "low": 0, "high": 1})


def test_exponential_bids_follow_their_law() -> None:
    """Kolmogorov and Smirnov's test (scipy.stats.kstest) finds no difference from scipy's law."""
    drawn = ExponentialBids(10**9).draw(rng(3), 5_000)
    assert stats.kstest(drawn, stats.expon(scale=10**9).cdf).pvalue > 0.01


def test_lognormal_bids_have_their_median() -> None:
    """Half lie below it, and the logarithms have the named deviation."""
    drawn = bids_of(BIDS[1]).draw(rng(4), COUNT)
    assert float((drawn < 1_000_000).mean()) == pytest.approx(0.5, abs=0.02)
    assert float(np.log(drawn).std()) == pytest.approx(0.5, rel=0.03)


def test_even_values_reach_both_ends() -> None:
    """Low and high are both included, each of three values about a third of the time."""
    drawn = EvenValues(5, 7).draw(rng(), 3_000)
    counts = np.bincount(drawn)[5:]
    assert counts.size == 3
    assert stats.chisquare(counts).pvalue > 0.01


@given(low=some.integers(0, 10**12), width=some.integers(0, 10**12))
def test_the_mean_of_even_values_is_the_middle(low: int, width: int) -> None:
    """Half of the sum of both ends, wherever they lie."""
    law = EvenValues(low, low + width)
    assert law.mean == (2 * low + width) / 2
    drawn = law.draw(rng(), 5)
    assert low <= drawn.min() <= drawn.max() <= low + width


@pytest.mark.parametrize(
    ("price", "chance"), [(9, 0.0), (10, 0.25), (15, 0.25), (20, 0.75), (50, 0.75), (99, 1.0)]
)
def test_an_empirical_law_wins_as_its_curve_says(price: int, chance: float) -> None:
    """A price wins against its draws as often as the curve's chance at or below that price."""
    law = EmpiricalBids(np.array([10, 20]), np.array([0.25, 0.75]), 99)
    drawn = law.draw(rng(5), COUNT)
    assert float((drawn <= price).mean()) == pytest.approx(chance, abs=0.02)


def test_a_curve_that_reaches_one_leaves_nothing_beyond() -> None:
    """Then no draw lies above its last price."""
    law = EmpiricalBids(np.array([10, 20]), np.array([0.25, 1.0]), 99)
    assert set(law.draw(rng(), 2_000).tolist()) == {10, 20}


def test_a_flat_stretch_of_a_curve_is_never_drawn() -> None:
    """Where the chance does not rise nobody bids: only the price where it rises is drawn."""
    law = EmpiricalBids(np.array([10, 20, 30]), np.array([0.5, 0.5, 1.0]), 99)
    assert set(law.draw(rng(), 2_000).tolist()) == {10, 30}


@given(
    steps=some.lists(some.tuples(some.integers(1, 50), some.floats(0, 1)), min_size=1, max_size=6)
)
def test_an_empirical_law_draws_its_own_prices_only(steps: list[tuple[int, float]]) -> None:
    """Whatever the curve, a draw is one of its prices or the one beyond."""
    prices = np.cumsum([step for step, _ in steps])
    chances = np.sort(np.array([chance for _, chance in steps]))
    drawn = EmpiricalBids(prices, chances, 10_000).draw(rng(), 50)
    assert set(drawn.tolist()) <= {*prices.tolist(), 10_000}
