"""Time-uniform boundaries against published values and simulation.

Howard, Ramdas, McAuliffe, Sekhon, "Time-uniform, nonparametric, nonasymptotic confidence
sequences", Ann. Statist. 49(2):1055-1080, 2021, and the unit tests of confseq, the library of
its authors, which print seven digits; further digits computed from the formula.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import optimism, sequences


@pytest.mark.parametrize(
    ("scale", "boundary", "printed"),
    [(3.0, 64.48754666, 64.48755), (-1.0, 28.99389297, 28.99389)],
)
def test_polynomial_stitching(scale: float, boundary: float, printed: float) -> None:
    """v = 100, alpha = .05, v_min = 10, as in the unit tests of confseq."""
    found = float(sequences.polynomial_stitching(100, 0.05, 10, scale))

    assert found == pytest.approx(printed, abs=6e-6)
    assert found == pytest.approx(boundary, abs=6e-9)


@given(some.floats(1.0, 1e9), some.floats(1e-4, 0.2))
def test_stitching_in_the_words_of_its_paper(variance: float, alpha: float) -> None:
    """1.7 sqrt(v (ln ln 2v + 0.72 ln(5.2 / alpha))), the paper's form rounded up (from memory),
    and the same with all digits, computed from the formula."""
    found = float(sequences.polynomial_stitching(variance, alpha, 1.0))
    twice = math.log(math.log(2 * variance))
    rounded = 1.7 * math.sqrt(variance * (twice + 0.72 * math.log(5.2 / alpha)))
    whole = math.sqrt(variance * (twice + math.log(5.187791339 / alpha) / 1.4))

    assert found == pytest.approx(1.698506473 * whole, rel=2e-9)
    assert 0.99 * rounded <= found <= rounded


def test_stitching_stays_flat_below_its_least_variance() -> None:
    """Too little variance is treated as the least, which is never too narrow."""
    low, least = sequences.polynomial_stitching([0.0, 10.0], 0.05, 10.0, 1.0)

    assert low == least


def test_normal_mixture() -> None:
    """v = 100, alpha = .05, best at 100, as in the unit tests of confseq."""
    boundary = float(sequences.normal_mixture(100, 0.05, 100))
    rho = float(sequences.mixture_rho(100, 0.05))

    assert (boundary, rho) == pytest.approx((30.35209, 12.60056), abs=6e-6)
    assert (boundary, rho) == pytest.approx((30.3520899, 12.60056098), abs=6e-8)


def test_half_width_beside_the_one_for_a_fixed_moment() -> None:
    """A thousand values, tuned for a thousand; computed from the formula, beside Hoeffding."""
    whole = float(sequences.bounded_half_width(1000, 1000))

    assert whole == pytest.approx(0.04799086792, abs=1e-10)
    assert float(optimism.hoeffding_radius(1000, 0.025)) == pytest.approx(0.04294694083, abs=1e-10)


def test_the_tuning_is_where_the_boundary_is_narrow() -> None:
    """At 1,000 values no other tuning is narrower by more than a thousandth."""
    at = sequences.bounded_half_width(1000, np.geomspace(30, 30_000, 61))

    assert float(sequences.bounded_half_width(1000, 1000)) <= 1.001 * at.min()
    assert at.max() > 1.1 * at.min()


def test_no_value_says_nothing() -> None:
    """Both half-widths are infinite before the first value."""
    assert float(sequences.bounded_half_width(0, 100)) == math.inf
    assert float(sequences.empirical_bernstein_half_width(0, 0, 1)) == math.inf


def test_variance_steps() -> None:
    """0, 1, 1 gather 1/4, then (1 - 0)^2, then (1 - 1/2)^2; their mirror image gathers as much."""
    for flip in (False, True):
        known = amount = variance = np.zeros(())
        for x in (0.0, 1.0, 1.0):
            value = 1.0 - x if flip else x
            known, amount, variance = sequences.variance_step(known, amount, variance, value)
        assert float(known) == 3.0
        assert float(variance) == pytest.approx(1.5)


@pytest.mark.parametrize("rate", [0.5, 0.02])
def test_both_sequences_cover_at_every_look(rate: float) -> None:
    """2,000 runs of 2,000 values, read after each: at most 1 run in 20 ever leaves, as promised;
    the half-width of one moment is left by several times as many."""
    generator, runs = np.random.default_rng(31), 2000
    known = amount = variance = np.zeros(runs)
    left = np.zeros((3, runs), dtype=np.bool_)
    for n in range(1, 2001):
        value = (generator.random(runs) < rate).astype(np.float64)
        known, amount, variance = sequences.variance_step(known, amount, variance, value)
        away = np.abs(amount / n - rate)
        left[0] |= away > sequences.bounded_half_width(float(n), 500.0)
        left[1] |= away > sequences.empirical_bernstein_half_width(known, variance, 5.0)
        left[2] |= away > 1.96 * math.sqrt(rate * (1 - rate) / n)

    assert np.all(left[:2].mean(axis=1) <= 0.05)
    assert left[2].mean() > 0.25


def test_empirical_bernstein_pays_only_for_rare_values_in_number() -> None:
    """At a rate of .02 it is the wider one at 50 values and the narrower one at 10,000."""
    few, many = (
        (
            float(sequences.empirical_bernstein_half_width(n, 0.0196 * n, 5.0))
            / float(sequences.bounded_half_width(n, n))
        )
        for n in (50, 10_000)
    )

    assert few > 1.0 > 2.0 * many
