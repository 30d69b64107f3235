"""Monotone win rates and exact intervals against other programs and their own definitions.

scikit-learn 1.9.1 `IsotonicRegression(y_min=0, y_max=1, out_of_bounds="clip")` was run once, as
it brings many packages, and what it gave stands here; scipy runs beside the code.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import optimize, stats

from service.learner import isotonic

TRIALS = [13, 11, 6, 11, 15, 27, 18, 26, 29, 18, 16, 9, 22, 5, 11]
WINS = [0, 1, 0, 0, 4, 7, 11, 8, 11, 7, 9, 4, 13, 3, 5]
SCIKIT_LEARN = [
    *(0.0, 0.0357142857143, 0.0357142857143, 0.0357142857143, 0.261904761905, 0.261904761905),
    *(0.406593406593, 0.406593406593, 0.406593406593, 0.406593406593, 0.52, 0.52),
    *(0.552631578947, 0.552631578947, 0.552631578947),
]
PLACES = some.lists(some.tuples(some.integers(0, 9), some.integers(1, 9)), min_size=1, max_size=30)


def test_six_bids() -> None:
    """Bids 1 to 6 with outcomes 0,1,0,0,1,1, by hand and by scikit-learn."""
    rate = isotonic.isotonic([0, 1, 0, 0, 1, 1], np.ones(6)).rate
    assert rate == pytest.approx([0, 1 / 3, 1 / 3, 1 / 3, 1, 1])


def test_rates_in_order_stay() -> None:
    """4/10, 3/6, 8/10 violate nothing."""
    assert isotonic.isotonic([4, 3, 8], [10, 6, 10]).rate == pytest.approx([0.4, 0.5, 0.8])


def test_the_rates_of_scikit_learn() -> None:
    """Fifteen places with drawn counts, to the twelve digits noted."""
    assert isotonic.isotonic(WINS, TRIALS).rate == pytest.approx(SCIKIT_LEARN, abs=1e-11)


@given(PLACES)
def test_the_rates_of_scipy(places: list[tuple[int, int]]) -> None:
    """`scipy.optimize.isotonic_regression`, whatever the counts."""
    wins, trials = np.array([(min(w, n), n) for w, n in places], dtype=float).T
    theirs = optimize.isotonic_regression(wins / trials, weights=trials).x
    assert isotonic.isotonic(wins, trials).rate == pytest.approx(theirs, abs=1e-12)


def test_places_without_trials_take_the_rate_before() -> None:
    """And the first ones are not known."""
    blocks = isotonic.isotonic([0, 1, 0, 2], [0, 2, 0, 2])
    assert np.isnan(blocks.rate[0])
    assert blocks.rate[1:].tolist() == [0.5, 0.5, 1.0]
    assert np.isnan(isotonic.isotonic([0, 0], [0, 0]).rate).all()


@pytest.mark.parametrize(("wins", "trials"), [(0, 10), (3, 10), (10, 10), (57, 1000)])
def test_the_exact_interval_is_that_of_scipy(wins: int, trials: int) -> None:
    """`scipy.stats.binomtest(...).proportion_ci(method="exact")`."""
    theirs = stats.binomtest(wins, trials).proportion_ci(0.95, method="exact")
    ours = [float(end) for end in isotonic.clopper_pearson(wins, trials, 0.95)]
    assert ours == pytest.approx([theirs.low, theirs.high], abs=1e-10)


def test_nothing_tried_is_nothing_known() -> None:
    """From 0 to 1, and a band without end."""
    assert [float(end) for end in isotonic.clopper_pearson(0, 0, 0.95)] == [0.0, 1.0]
    assert float(isotonic.dkw_reach(0, 0.95)) == np.inf


def test_the_band_of_an_empirical_distribution() -> None:
    """sqrt(ln 40 / 200) for a hundred auctions at 95 %, by the formula; it covers in 95 %."""
    reach = float(isotonic.dkw_reach(100, 0.95))
    assert reach == pytest.approx(0.13581015157, abs=1e-10)
    rng = np.random.default_rng(3)
    off = [stats.kstest(rng.random(100), "uniform").statistic > reach for _ in range(1000)]
    assert 20 <= sum(off) <= 70
