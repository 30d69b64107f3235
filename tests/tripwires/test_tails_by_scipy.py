"""Tails beside the laws of scipy.stats, and what any tail must keep to, on drawn numbers."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from service.tripwires import tails

COUNTS = st.integers(0, 60)
MEANS = st.floats(0.01, 80)
SHARES = st.floats(0.001, 0.999)
ALPHAS = st.floats(0.001, 0.5)


@settings(max_examples=60)
@given(count=COUNTS, mean=MEANS)
def test_poisson_tails_meet_in_one(count: int, mean: float) -> None:
    """So many or more, and fewer than so many: together certain, and both as scipy.stats has."""
    fewer = 0.0 if count == 0 else tails.poisson_at_most(count - 1, mean)
    assert tails.poisson_at_least(count, mean) + fewer == pytest.approx(1.0)
    assert tails.poisson_at_most(count, mean) == pytest.approx(stats.poisson.cdf(count, mean))


@settings(max_examples=60)
@given(count=st.integers(0, 30), share=SHARES)
def test_binomial_tails_mirror_each_other(count: int, share: float) -> None:
    """Successes at a share are failures at the rest of it."""
    mirrored = tails.binomial_at_most(30 - count, 30, 1 - share)
    assert tails.binomial_at_least(count, 30, share) == pytest.approx(mirrored)


@settings(max_examples=40)
@given(count=COUNTS, alpha=ALPHAS)
def test_poisson_limits_are_where_the_tails_are_half_of_alpha(count: int, alpha: float) -> None:
    """That is what makes them exact (Garwood 1936)."""
    low, high = tails.poisson_limits(count, alpha)
    assert low <= count <= high
    assert tails.poisson_at_most(count, high) == pytest.approx(alpha / 2)
    assert count == 0 or tails.poisson_at_least(count, low) == pytest.approx(alpha / 2)


@settings(max_examples=40)
@given(count=st.integers(0, 40), alpha=ALPHAS)
def test_binomial_limits_are_those_of_scipy(count: int, alpha: float) -> None:
    """The exact method of Clopper and Pearson in scipy.stats.binomtest."""
    theirs = stats.binomtest(count, 40).proportion_ci(1 - alpha, "exact")
    assert tails.binomial_limits(count, 40, alpha) == pytest.approx((theirs.low, theirs.high))


@pytest.mark.parametrize(
    ("tail", "wanted"),
    [
        (tails.poisson_at_least(0, 0.0), 1.0),
        (tails.poisson_at_least(-3, 5.0), 1.0),
        (tails.poisson_at_most(0, 0.0), 1.0),
        (tails.poisson_at_least(1, 0.0), 0.0),
        (tails.binomial_at_least(0, 0, 0.5), 1.0),
        (tails.binomial_at_least(4, 3, 0.5), 0.0),
        (tails.binomial_at_most(3, 3, 0.5), 1.0),
        (tails.binomial_at_most(4, 3, 0.5), 1.0),
        (tails.binomial_at_most(0, 3, 1.0), 0.0),
        (tails.binomial_at_least(3, 3, 1.0), 1.0),
        (tails.student_two_sided(0.0, 5), 1.0),
    ],
)
def test_what_is_certain_or_impossible_is_exactly_so(tail: float, wanted: float) -> None:
    """Empty trials, more successes than trials, shares of nought and one: never not-a-number."""
    assert tail == wanted


@pytest.mark.parametrize(
    ("limits", "wanted"),
    [
        (tails.binomial_limits(0, 0, 0.05), (0.0, 1.0)),
        (tails.binomial_limits(5, 5, 0.05), (0.025 ** (1 / 5), 1.0)),
        (tails.binomial_limits(0, 5, 0.05), (0.0, 1 - 0.025 ** (1 / 5))),
    ],
)
def test_limits_at_the_ends_have_a_closed_form(
    limits: tails.Pair, wanted: tuple[float, float]
) -> None:
    """All of five: p to the fifth is half of alpha; none of none may be anything."""
    assert limits == pytest.approx(wanted)


@settings(max_examples=40)
@given(count=st.integers(0, 40), more=st.integers(1, 20))
def test_a_count_that_is_further_off_is_less_likely(count: int, more: int) -> None:
    """Each tail falls or stays as its count moves away."""
    history = [(5.0, 1.0), (7.0, 1.0), (6.0, 1.0), (6.0, 1.0)]

    def tail(seen: int, *, upper: bool) -> float:
        return tails.rates_tail((seen, 1.0), history, upper=upper)

    assert tail(count + more, upper=True) <= tail(count, upper=True)
    assert tail(count, upper=False) <= tail(count + more, upper=False)


@settings(max_examples=30)
@given(scale=st.floats(0.1, 100))
def test_the_unit_of_exposure_does_not_matter(scale: float) -> None:
    """Wins or thousands of wins: the chance of a count is the same."""
    history = [(5.0, 1.0), (9.0, 2.0), (4.0, 1.0)]
    other = [(count, scale * exposure) for count, exposure in history]
    found = tails.rates_tail((12.0, scale), other, upper=True)
    assert found == pytest.approx(tails.rates_tail((12.0, 1.0), history, upper=True))


@settings(max_examples=40)
@given(pairs=st.lists(st.tuples(st.integers(0, 20), st.integers(20, 40)), max_size=8))
def test_a_spread_is_never_below_one(pairs: list[tails.Pair]) -> None:
    """A history that happens to be even makes nothing more certain than its law."""
    assert tails.spread_of_rates(pairs) >= 1.0
    assert tails.spread_of_shares(pairs) >= 1.0


@pytest.mark.parametrize("history", [[], [(7.0, 10.0)], [(0.0, 5.0)] * 4, [(0.0, 0.0)] * 3])
def test_nothing_to_compare_is_no_spread(history: list[tails.Pair]) -> None:
    """None, one alone, never any, and no trials at all."""
    assert (tails.spread_of_rates(history), tails.spread_of_shares(history)) == (1.0, 1.0)


def test_a_spread_of_shares_is_chi_square_over_its_freedom() -> None:
    """Shares of 2, 8, 5 and 5 in 10 (scipy.stats.chi2_contingency as an outside check)."""
    counts = [2, 8, 5, 5]
    table = [counts, [10 - count for count in counts]]
    chi_square = stats.chi2_contingency(table, correction=False).statistic
    pairs = [(float(count), 10.0) for count in counts]
    assert tails.spread_of_shares(pairs) == pytest.approx(chi_square / 3)
    assert chi_square / 3 == pytest.approx(2.4)


def test_a_share_is_judged_at_the_less_favourable_limit() -> None:
    """Of 30 in 100 the 99 % limits are taken, so that a short history is believed less."""
    long, short = [(30.0, 100.0)] * 4, [(3.0, 10.0)] * 4
    at = [tails.shares_tail((25.0, 50.0), history, upper=True) for history in (short, long)]
    assert at[0] > 10 * at[1]
    high = tails.binomial_limits(120, 400, tails.LIMITS)[1]
    assert at[1] == pytest.approx(stats.binom(50, high).sf(24))
    low = tails.binomial_limits(120, 400, tails.LIMITS)[0]
    found = tails.shares_tail((5.0, 50.0), long, upper=False)
    assert found == pytest.approx(stats.binom(50, low).cdf(5))
