"""Time-uniform intervals from counts: published values, a root finder, and cover by simulation.

Howard, Ramdas, McAuliffe, Sekhon, "Time-uniform, nonparametric, nonasymptotic confidence
sequences", Ann. Statist. 49(2):1055-1080, 2021, and the unit tests of confseq, the library of
its authors, which print six digits; further digits computed from the formula.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from numpy.random import Generator
from numpy.typing import NDArray
from scipy import integrate, optimize, stats

from service.learner import count_sequences as sequences
from service.learner import delay
from service.learner.arrays import Numbers

Counts = NDArray[np.int64]
Evidence = Callable[[Counts], Numbers]

LEVEL = math.log(20)
LOOKS, RUNS = 10_000, 2000
# The share of runs that must be covered at all looks: 0.95 less three standard errors.
COVER_MIN = 0.95 - 3 * math.sqrt(0.95 * 0.05 / RUNS)


@pytest.mark.parametrize(
    ("successes", "trials", "tuned_for", "low", "high"),
    [
        (700, 1000, 100, 0.6516298139, 0.7459495008),
        (15, 50, 50, 0.129556995, 0.5118964025),
        (5, 50, 50, 0.01302176001, 0.2692646672),
    ],
)
def test_bernoulli_interval(
    successes: int, trials: int, tuned_for: int, low: float, high: float
) -> None:
    """As in the unit tests of confseq (.651629 and .745949 for the first), alpha = .05."""
    found = sequences.bernoulli_interval(successes, trials, 0.05, tuned_for)

    assert [float(limit) for limit in found] == pytest.approx([low, high], abs=1e-9)


def test_bernoulli_evidence_is_a_mixture_of_likelihood_ratios() -> None:
    """The integral of the ratio over Beta(M p, M (1 - p)), by adaptive quadrature."""
    p, weight, s, n = 0.3, 20.0, 9, 17
    law = stats.beta(weight * p, weight * (1 - p))
    ratio, _ = integrate.quad(
        lambda q: float(law.pdf(q)) * (q / p) ** s * ((1 - q) / (1 - p)) ** (n - s), 0, 1
    )

    found = sequences.bernoulli_evidence(s, n, p, weight)
    assert float(found) == pytest.approx(math.log(ratio), abs=1e-9)


def test_poisson_evidence_is_a_mixture_of_likelihood_ratios() -> None:
    """The integral of the ratio over Gamma(M p, M), by adaptive quadrature."""
    p, weight, k, exposure = 0.3, 20.0, 9, 17.5
    law = stats.gamma(weight * p, scale=1 / weight)
    ratio, _ = integrate.quad(
        lambda q: float(law.pdf(q)) * (q / p) ** k * math.exp(-exposure * (q - p)), 0, 5
    )

    found = sequences.poisson_evidence(k, exposure, p, weight)
    assert float(found) == pytest.approx(math.log(ratio), abs=1e-8)


@given(some.floats(0.0, 7.0), some.floats(-6.0, 0.0), some.floats(1.0, 6.5), some.booleans())
def test_bernoulli_limits_by_another_root_finder(
    size: float, rarity: float, tuning: float, mirrored: bool
) -> None:
    """Brent's method on the evidence finds the same limits, up to ten million trials."""
    trials = round(math.pow(10.0, size))
    successes = round(trials * math.pow(10.0, rarity))
    successes = trials - successes if mirrored else successes
    weight = float(sequences.bernoulli_weight(10**tuning))
    limits = sequences.bernoulli_interval(successes, trials, 0.05, 10**tuning)

    def excess(log_odds: float) -> float:
        rate = 1 / (1 + math.exp(-log_odds))
        return float(sequences.bernoulli_evidence(successes, trials, rate, weight)) - LEVEL

    mean = min(max(successes / trials, 1e-9), 1 - 1e-9)
    middle = math.log(mean / (1 - mean))
    for limit, far in zip(limits, (-33.0, 33.0), strict=True):
        if excess(far) <= 0:
            assert float(limit) in (0.0, 1.0) or min(float(limit), 1 - float(limit)) < 1e-13
        else:
            root = 1 / (1 + math.exp(-optimize.brentq(excess, middle, far, xtol=1e-13)))
            assert float(limit) == pytest.approx(root, rel=1e-6, abs=1e-9)


@given(some.integers(0, 10**4), some.floats(-3.0, 8.0), some.floats(0.0, 7.0))
def test_poisson_limits_by_another_root_finder(count: int, size: float, tuning: float) -> None:
    """Brent's method on the evidence finds the same limits, also at fractions of exposure."""
    exposure, tuned_for = math.pow(10.0, size), math.pow(10.0, tuning)
    weight = float(sequences.poisson_weight(tuned_for))
    limits = sequences.poisson_interval(count, exposure, 0.05, tuned_for)

    def excess(log_rate: float) -> float:
        found = sequences.poisson_evidence(count, exposure, math.exp(log_rate), weight)
        return float(found) - LEVEL

    middle = math.log(max(count, 1e-9) / exposure)
    high = optimize.brentq(excess, middle, middle + 60, xtol=1e-13)
    assert float(limits[1]) == pytest.approx(math.exp(high), rel=1e-6)
    if count <= 1:
        assert float(limits[0]) == 0.0
    else:
        low = optimize.brentq(excess, middle - 60, middle, xtol=1e-13)
        assert float(limits[0]) == pytest.approx(math.exp(low), rel=1e-6)


def test_rare_conversions_give_useful_limits() -> None:
    """400 of ten million at 4 in 100,000: both limits within a quarter, Poisson like Bernoulli."""
    bernoulli = sequences.bernoulli_interval(400, 10**7, 0.05, 10**7)
    poisson = sequences.poisson_interval(400, 1e7, 0.05, 1e7)

    assert 3e-5 < bernoulli[0] < 4e-5 < bernoulli[1] < 5e-5
    assert [float(x) for x in poisson] == pytest.approx([float(x) for x in bernoulli], rel=1e-3)


def test_no_trial_and_no_exposure_say_nothing() -> None:
    """0 to 1 before the first trial, 0 to infinity before the first exposure."""
    assert [float(x) for x in sequences.bernoulli_interval(0, 0, 0.05, 100)] == [0.0, 1.0]
    assert [float(x) for x in sequences.poisson_interval(0, 0, 0.05, 100)] == [0.0, math.inf]


def test_arrays_give_what_single_numbers_give() -> None:
    """Many line items at once get the digits of each alone."""
    s, n = np.array([0, 1, 2, 40, 50, 7]), np.array([0, 50, 50, 50, 50, 10**6])
    for interval in (sequences.bernoulli_interval, sequences.poisson_interval):
        low, high = interval(s, n, 0.05, 1000)
        each = [interval(one, of, 0.05, 1000) for one, of in zip(s, n, strict=True)]
        assert low.tolist() == pytest.approx([float(x[0]) for x in each], rel=1e-10)
        assert high.tolist() == pytest.approx([float(x[1]) for x in each], rel=1e-10)


def least_and_most(evidence: Evidence, middle: Counts, most: Counts) -> tuple[Counts, Counts]:
    """The least and most count at each look whose evidence against the true rate is too little."""
    low, outside = middle.copy(), np.full_like(middle, -1)
    for _ in range(int(middle.max()).bit_length() + 1):
        half = (low + outside) // 2
        inside = evidence(np.maximum(half, 0)) < LEVEL
        low, outside = np.where(inside & (half >= 0), half, low), np.where(inside, outside, half)
    high, beyond = middle.copy(), most + 1
    for _ in range(int(most.max()).bit_length() + 1):
        half = (high + beyond) // 2
        inside = evidence(np.minimum(half, most)) < LEVEL
        high, beyond = np.where(inside, half, high), np.where(inside, beyond, half)
    return low, np.minimum(high, most)


def covered(
    draw: Callable[[Generator, int], Counts], bounds: list[tuple[Counts, Counts]]
) -> list[float]:
    """The share of runs whose count stays within each pair of bounds at every look."""
    generator, inside = np.random.default_rng(41), []
    for _ in range(RUNS // 100):
        counts = np.cumsum(draw(generator, 100), axis=1)
        inside.append([((a <= counts) & (counts <= b)).all(axis=1).mean() for a, b in bounds])
    return [float(share) for share in np.mean(inside, axis=0)]


@pytest.mark.parametrize(
    ("rate", "step", "tuned_for"), [(0.3, 1, 1000), (0.001, 100, 10**5), (0.00004, 1000, 10**6)]
)
def test_bernoulli_cover_at_every_look(rate: float, step: int, tuned_for: int) -> None:
    """2,000 runs of 10,000 looks: 0.95 less three standard errors of the runs are covered at all
    looks at once; the exact interval of Clopper and Pearson for one moment fails the same."""
    trials = step * np.arange(1, LOOKS + 1)
    weight = sequences.bernoulli_weight(tuned_for)
    low, high = least_and_most(
        lambda s: sequences.bernoulli_evidence(s, trials, rate, weight),
        np.rint(trials * rate).astype(np.int64),
        np.minimum(trials, 40 + np.rint(2 * trials * rate).astype(np.int64)),
    )
    fixed = [stats.binom.ppf(tail, trials, rate).astype(np.int64) for tail in (0.025, 0.975)]

    always, clopper_pearson = covered(
        lambda generator, runs: generator.binomial(step, rate, (runs, LOOKS)),
        [(low, high), (fixed[0], fixed[1])],
    )
    assert always >= COVER_MIN
    assert clopper_pearson < COVER_MIN

    # The bounds on counts are those of the interval itself.
    within = [sequences.bernoulli_interval(edge, trials, 0.05, tuned_for) for edge in (low, high)]
    assert all(np.all((a <= rate) & (rate <= b)) for a, b in within)
    past = sequences.bernoulli_interval(np.minimum(high + 1, trials), trials, 0.05, tuned_for)
    assert np.all((past[0] > rate) | (high == trials))


@pytest.mark.parametrize(("rate", "step"), [(0.3, 1.0), (0.00004, 1000.0)])
def test_poisson_cover_at_every_look(rate: float, step: float) -> None:
    """2,000 runs of 10,000 looks at exposure that grows by unequal fractions."""
    parts = step * np.random.default_rng(42).uniform(0.0, 2.0, LOOKS)
    exposure, tuned_for = np.cumsum(parts), 1000 * step
    weight = sequences.poisson_weight(tuned_for)
    middle = np.rint(exposure * rate).astype(np.int64)
    low, high = least_and_most(
        lambda k: sequences.poisson_evidence(k, exposure, rate, weight), middle, 40 + 2 * middle
    )

    always = covered(
        lambda generator, runs: generator.poisson(parts * rate, (runs, LOOKS)), [(low, high)]
    )
    assert always[0] >= COVER_MIN

    within = [sequences.poisson_interval(edge, exposure, 0.05, tuned_for) for edge in (low, high)]
    assert all(np.all((a <= rate) & (rate <= b)) for a, b in within)
    past = sequences.poisson_interval(high + 1, exposure, 0.05, tuned_for)
    assert np.all(past[0] > rate)


def test_poisson_cover_with_conversions_on_their_way() -> None:
    """1,000 runs of 1,500 wins, 1 in 50 of which converts once, after a known exponential delay;
    exposure from `delay.py`, read at 600 moments: at most 1 run in 20 is ever left."""
    generator, rate, mean_delay = np.random.default_rng(43), 0.02, 150.0
    moments = np.linspace(5.0, 3000.0, 600)
    ages = np.maximum(moments[:, None] - np.arange(1500), 0.0)
    exposure = delay.exposure(ages, np.ones(1500), mean_delay)
    converts = generator.random((1000, 1500)) < rate
    arrival = np.arange(1500) + generator.exponential(mean_delay, converts.shape)
    look = np.searchsorted(moments, np.where(converts, arrival, np.inf))
    counts = np.array([np.cumsum(np.bincount(row, minlength=601)[:600]) for row in look])

    evidence = sequences.poisson_evidence(counts, exposure, rate, sequences.poisson_weight(1000.0))
    assert (evidence >= LEVEL).any(axis=1).mean() <= 0.05
    assert evidence.max() > LEVEL
