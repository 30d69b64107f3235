"""Optimistic indices against their published formulas, closed forms and scipy's distributions.

Sources stand beside the functions. Values marked "computed from the formula" were computed
apart from this code; no table of them is published. Sample A is 0,0,1,0,1,0,0,0,1,0: mean
0.3, variance 0.21, unbiased variance 7/30.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import stats

from service.learner import arrays, bounds, optimism

CLOSE = 1e-9
MEAN_A, VARIANCE_A, UNBIASED_A = 0.3, 0.21, 0.7 / 3.0


@pytest.mark.parametrize(("known", "bid"), [(500, 0.3871834506), (50, 1.0), (0, 1.0)])
def test_bernstein_ucbid(known: int, bid: float) -> None:
    """Achddou, Cappé, Garivier, ALT 2021: mean .2, W = .16, t = 1000, gamma = 2; computed
    from the formula."""
    index = optimism.bernstein_ucbid_index(0.2, 0.16, 1000, known, 2.0)

    assert float(index) == pytest.approx(bid, abs=CLOSE)


def test_bernstein_ucbid_before_clipping() -> None:
    """At N = 50 the sum is 1.40379783, computed from the formula; a lower mean shows it whole."""
    shifted = optimism.bernstein_ucbid_index(0.2 - 1.0, 0.16, 1000, 50, 2.0)

    assert float(shifted) == pytest.approx(0.40379783, abs=5e-9)


@pytest.mark.parametrize(("zeta", "index"), [(1.2, 2.439629445), (1.0, 2.12134322)])
def test_ucb_v(zeta: float, index: float) -> None:
    """Audibert, Munos, Szepesvári 2009 on sample A at t = 100; computed from the formula."""
    found = optimism.ucb_v_index(MEAN_A, VARIANCE_A, 100, 10, zeta)

    assert float(found) == pytest.approx(index, abs=CLOSE)


def test_ucb_v_scales_with_the_range_of_values() -> None:
    """Values ten times as large have an index ten times as large."""
    found = optimism.ucb_v_index(10 * MEAN_A, 100 * VARIANCE_A, 100, 10, 1.2, 10.0)

    assert float(found) == pytest.approx(24.39629445, abs=10 * CLOSE)


def test_audibert_radius() -> None:
    """Audibert, Munos, Szepesvári 2009 on sample A, 95 %; computed from the formula."""
    radius = optimism.audibert_radius(VARIANCE_A, 10, 0.05)

    assert float(radius) == pytest.approx(1.642986949, abs=CLOSE)


@pytest.mark.parametrize(
    ("variance", "known", "bernstein", "hoeffding"),
    [
        (UNBIASED_A, 10, 1.371283021, 0.387022756),
        (0.02 * 0.98 * 1e4 / 9999, 10_000, 0.004663699014, 0.01223873415),
    ],
)
def test_maurer_pontil_beside_hoeffding(
    variance: float, known: int, bernstein: float, hoeffding: float
) -> None:
    """Maurer, Pontil, COLT 2009 and Hoeffding, JASA 1963, 95 % one-sided; computed from the
    formulas."""
    assert float(optimism.maurer_pontil_radius(variance, known, 0.05)) == pytest.approx(
        bernstein, abs=CLOSE
    )
    assert float(optimism.hoeffding_radius(known, 0.05)) == pytest.approx(hoeffding, abs=CLOSE)


def test_kl_ucb() -> None:
    """Garivier, Cappé, COLT 2011 on sample A, t = 100, c = 0; computed from the formula."""
    assert float(optimism.kl_ucb_index(MEAN_A, 100, 10)) == pytest.approx(0.756022738, abs=CLOSE)


@given(some.floats(0.01, 0.99), some.integers(3, 10**6), some.floats(0.5, 1e5))
def test_kl_ucb_solves_its_equation(mean: float, rounds: int, known: float) -> None:
    """With c = 3 the divergence at the index is (ln t + 3 ln ln t) / N, unless it is 1."""
    index = float(optimism.kl_ucb_index(mean, rounds, known, 3.0))
    level = (math.log(rounds) + 3 * math.log(math.log(rounds))) / known

    assert mean < index <= 1.0
    if index < 1.0 - 1e-9:
        assert float(bounds.kl(mean, index)) == pytest.approx(level, rel=1e-6, abs=1e-12)


@pytest.mark.parametrize(
    ("successes", "index"), [(3, 0.6604167582), (0, 0.3420667753), (0, 1 - 100 ** (-1 / 11))]
)
def test_bayes_ucb(successes: int, index: float) -> None:
    """Kaufmann, Cappé, Garivier, AISTATS 2012, N = 10, t = 100, c = 0; computed from the
    formula, and 1 - 100^(-1/11) in closed form for no success."""
    found = optimism.bayes_ucb_beta(successes, 10 - successes, 100, 10**4)

    assert float(found) == pytest.approx(index, abs=CLOSE)


def test_bayes_ucb_by_a_binomial_tail() -> None:
    """P(Beta(4, 8) > 1/2) = P(Bin(11, 1/2) <= 3) = 232 / 2048 = 0.11328125, exactly."""
    assert float(optimism.bayes_ucb_beta(3, 7, 1 / 0.11328125, 10)) == pytest.approx(0.5, abs=1e-12)


@given(
    some.floats(0.0, 500.0), some.floats(0.0, 5e4), some.integers(2, 10**9), some.floats(0.0, 5.0)
)
def test_bayes_ucb_by_another_implementation(s: float, f: float, rounds: int, c: float) -> None:
    """scipy.stats gives the same upper quantile, also of fractional sums and another prior."""
    above = 1.0 / (rounds * math.log(1e6) ** c)
    found = float(optimism.bayes_ucb_beta(s, f, rounds, 10**6, c, (0.5, 40.0)))

    assert float(stats.beta.sf(found, s + 0.5, f + 40.0)) == pytest.approx(above, rel=1e-6)


@pytest.mark.parametrize(
    ("index", "top"),
    [
        (lambda n: optimism.bernstein_ucbid_index(0.0, 0.0, 9, n, 2.0), 1.0),
        (lambda n: optimism.kl_ucb_index(0.0, 9, n), 1.0),
        (lambda n: optimism.ucb_v_index(0.0, 0.0, 9, n), math.inf),
        (lambda n: optimism.audibert_radius(0.0, n, 0.05), math.inf),
        (lambda n: optimism.maurer_pontil_radius(0.0, n, 0.05), math.inf),
        (lambda n: optimism.hoeffding_radius(n, 0.05), math.inf),
    ],
)
def test_fewer_known_values_never_lower_an_index(
    index: Callable[[arrays.Numbers], arrays.Numbers], top: float
) -> None:
    """From nothing known over fractions to a million the index only falls, from its top."""
    found = index(np.array([0.0, 0.25, 0.9, 1.0, 1.5, 7.0, 1e6]))

    assert found[0] == top
    assert np.all(found[1:] <= found[:-1])
    assert found[-1] < 0.01
