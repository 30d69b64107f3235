"""Exact tails beside published limits and beside scipy's own laws."""

from __future__ import annotations

import pytest
from scipy import stats

from service.tripwires import tails


@pytest.mark.parametrize(
    ("count", "low", "high"),
    [(0, 0.0, 3.69), (1, 0.0253, 5.57), (7, 2.81, 14.42), (10, 4.80, 18.39), (20, 12.22, 30.89)],
)
def test_poisson_limits_are_those_of_the_table(count: int, low: float, high: float) -> None:
    """95 % limits as tabulated after Garwood (1936) in most textbooks; values from memory."""
    assert tails.poisson_limits(count, 0.05) == pytest.approx((low, high), rel=0.003, abs=1e-4)


@pytest.mark.parametrize(
    ("count", "trials", "low", "high"), [(0, 10, 0.0, 0.3085), (5, 10, 0.1871, 0.8129)]
)
def test_binomial_limits_are_those_of_the_table(
    count: int, trials: int, low: float, high: float
) -> None:
    """95 % limits as tabulated after Clopper and Pearson (1934); values from memory."""
    assert tails.binomial_limits(count, trials, 0.05) == pytest.approx((low, high), abs=1e-4)


@pytest.mark.parametrize("count", [0, 1, 3, 7, 40])
@pytest.mark.parametrize("mean", [0.3, 7.0, 30.0])
def test_poisson_tails_are_the_sums(count: int, mean: float) -> None:
    """Both tails are those of scipy's law."""
    law = stats.poisson(mean)
    assert tails.poisson_at_least(count, mean) == pytest.approx(law.sf(count - 1), rel=1e-9)
    assert tails.poisson_at_most(count, mean) == pytest.approx(law.cdf(count), rel=1e-9)


@pytest.mark.parametrize("count", [0, 1, 9, 40, 50])
@pytest.mark.parametrize("share", [0.01, 0.5, 0.97])
def test_binomial_tails_are_the_sums(count: int, share: float) -> None:
    """Both tails are those of scipy's law."""
    law = stats.binom(50, share)
    assert tails.binomial_at_least(count, 50, share) == pytest.approx(law.sf(count - 1), rel=1e-9)
    assert tails.binomial_at_most(count, 50, share) == pytest.approx(law.cdf(count), rel=1e-9)


def test_two_counts_are_compared_by_the_binomial_that_is_left() -> None:
    """Przyborowski and Wilenski (1940): given the sum, the newer count is binomial."""
    history = [(7.0, 1.0)] * 4
    tail = tails.rates_tail((20.0, 1.0), history, upper=True)
    assert tail == pytest.approx(stats.binomtest(20, 48, 0.2, alternative="greater").pvalue)
    tail = tails.rates_tail((0.0, 1.0), history, upper=False)
    assert tail == pytest.approx(stats.binomtest(0, 28, 0.2, alternative="less").pvalue)


def test_a_student_tail_is_the_sum_of_both_sides() -> None:
    """As scipy's law has it."""
    assert tails.student_two_sided(-3.0, 9) == pytest.approx(2 * stats.t(9).sf(3.0))


def test_counts_that_vary_more_weigh_less() -> None:
    """The factor is Pearson's over its degrees of freedom, and never below 1."""
    assert tails.spread_of_rates([(7, 1)] * 5) == 1.0
    wild = [(1.0, 1.0), (13.0, 1.0)] * 3
    assert tails.spread_of_rates(wild) == pytest.approx(6 * 36 / 7 / 5)
    assert tails.rates_tail((20, 1), wild, upper=True) > 30 * tails.rates_tail(
        (20, 1), [(7.0, 1.0)] * 6, upper=True
    )
    shares = [(1.0, 10.0), (9.0, 10.0)] * 3
    assert tails.spread_of_shares(shares) == pytest.approx(6 * 16 / 5 / 0.5 / 5)
    assert tails.spread_of_shares([(0.0, 10.0)] * 4) == 1.0


@pytest.mark.parametrize("share", [0.1, 0.5, 0.8])
def test_plain_binomial_counts_are_not_taken_for_wild(share: float) -> None:
    """Large shares vary less than Poisson counts of their mean, and are measured by their own."""
    even = [(100 * share, 100.0)] * 6
    assert tails.spread_of_shares(even) == 1.0
    tail = tails.shares_tail((100.0, 100.0), even, upper=True)
    high = tails.binomial_limits(600 * share, 600, tails.LIMITS)[1]
    assert tail == pytest.approx(stats.binom(100, high).sf(99), rel=1e-9)
