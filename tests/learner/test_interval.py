"""The interval of the mean: exact cases by another implementation, the rest by simulation."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from numpy.random import Generator
from numpy.typing import NDArray
from scipy import stats

from service.learner.interval import mean_interval

Draw = Callable[[Generator, tuple[int, int]], NDArray[np.float64]]


@pytest.mark.parametrize(("known", "converted"), [(10, 0), (10, 1), (400, 3), (2000, 900)])
def test_alike_values_give_the_exact_limits(known: int, converted: int) -> None:
    """Clopper and Pearson 1934 for values of 0 or 7, by scipy.stats.binomtest."""
    low, high = mean_interval(known, 7 * converted, 49 * converted, 7.0, 50.0)
    exact = stats.binomtest(converted, known).proportion_ci(0.95, method="exact")

    assert float(low) == pytest.approx(7 * exact.low, rel=1e-9, abs=1e-12)
    assert float(high) == pytest.approx(7 * exact.high, rel=1e-9)


@given(some.integers(2, 3000), some.floats(0.0, 1.0))
def test_alike_values_never_get_less_than_the_exact_limits(known: int, share: float) -> None:
    """Student's limit may widen the interval of Clopper and Pearson upwards, never narrow it."""
    converted = round(share * known)
    low, high = mean_interval(known, 7 * converted, 49 * converted, 7.0, 50.0)
    exact = stats.binomtest(converted, known).proportion_ci(0.95, method="exact")

    assert float(low) == pytest.approx(7 * exact.low, rel=1e-6, abs=1e-9)
    assert float(high) >= 7 * exact.high * (1 - 1e-6)


def test_the_printed_limits_of_one_in_ten() -> None:
    """One in ten gives 0.0025 to 0.4450 in printed tables (from memory)."""
    low, high = mean_interval(10, 1, 1, 1.0, 1.0)

    assert (float(low), float(high)) == pytest.approx((0.0025, 0.4450), abs=5e-5)


def test_nothing_known_says_nothing() -> None:
    """Before the first value the mean may be anything from nothing to the ceiling."""
    low, high = mean_interval(0, 0, 0, 2.0, 50.0)

    assert (float(low), float(high)) == (0.0, 50.0)


def test_a_single_value_sets_no_upper_limit() -> None:
    """One value says nothing of how values differ, so the upper limit is the ceiling."""
    low, high = mean_interval(1, 3, 9, 2.0, 50.0)

    assert 0.0 < float(low) < 3.0
    assert float(high) == 50.0


def bernoulli(chance: float) -> Draw:
    """Values of one with this chance, else nothing."""
    return lambda rng, size: (rng.random(size) < chance).astype(np.float64)


def baskets(chance: float) -> Draw:
    """With this chance an exponential amount of mean 2, else nothing."""
    return lambda rng, size: (rng.random(size) < chance) * rng.exponential(2.0, size)


def normal(rng: Generator, size: tuple[int, int]) -> NDArray[np.float64]:
    """Every win has a value, all nearly the same."""
    return rng.normal(1.0, 0.1, size)


@pytest.mark.parametrize(
    ("draw", "truth", "known", "covers"),
    [
        (bernoulli(0.3), 0.3, 100, 0.95),
        (bernoulli(0.001), 0.001, 5000, 0.95),
        (bernoulli(0.95), 0.95, 100, 0.95),
        (normal, 1.0, 10, 0.95),
        (normal, 1.0, 500, 0.95),
        (baskets(1.0), 2.0, 200, 0.93),
        (baskets(0.001), 0.002, 5000, 0.90),
        (baskets(0.001), 0.002, 20_000, 0.92),
    ],
)
def test_the_interval_covers(draw: Draw, truth: float, known: int, covers: float) -> None:
    """Over 1,000 seeded samples it holds the true mean as often as it says, and not always."""
    rng = np.random.default_rng(7)
    held = []
    for _ in range(10):
        values = draw(rng, (100, known))
        totals, squares = values.sum(axis=1), (values * values).sum(axis=1)
        low, high = mean_interval(np.full(100, known), totals, squares, 2.0, 50.0)
        held += list((low <= truth) & (truth <= high))
    share, error = np.mean(held), np.sqrt(0.95 * 0.05 / 1000)

    assert share >= covers - 2 * error, f"covers {share:.3f} of 1000, wanted {covers}"


def test_the_interval_narrows() -> None:
    """A hundred times the wins make it about ten times narrower, so it is no idle interval."""
    widths = []
    for known in (1_000, 100_000):
        low, high = mean_interval(known, 0.3 * known, 0.3 * known, 1.0, 1.0)
        widths.append(float(high - low))

    assert widths[0] / widths[1] == pytest.approx(10.0, rel=0.02)
