"""Delayed conversions against published formulas, score equations, scipy and simulation.

Sources: Chapelle, "Modeling delayed feedback in display advertising", KDD 2014; Vernade,
Cappé, Perchet, "Stochastic Bandit Models for Delayed Conversions", UAI 2017; Joulani, György,
Szepesvári, "Online Learning under Delayed Feedback", ICML 2013. Values marked "computed from
the formula" were computed apart from this code; no table of them is published.
"""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from numpy.random import Generator
from numpy.typing import NDArray
from scipy import optimize

from service.learner import delay

CLOSE = 1e-9
TEN = delay.seen(3, 1 + 2 + 4, [1, 3, 6, 8, 10], [1, 1, 1, 1, 3])


def law(share: float, rate: float) -> delay.Law:
    """A law of plain numbers."""
    return delay.Law(np.asarray(share), np.asarray(rate))


def test_log_likelihood_of_two_impressions() -> None:
    """Chapelle, KDD 2014: p = .3, rate .5, one conversion after 1, one open since 2; computed
    from the formula."""
    found = delay.log_likelihood(delay.seen(1, 1, [2], [1]), 0.3, 0.5)

    assert float(found) == pytest.approx(-2.607391941, abs=CLOSE)
    assert float(delay.will_convert(2, law(0.3, 0.5))) == pytest.approx(0.1361904714, abs=CLOSE)


def test_one_step_of_expectation_and_maximisation() -> None:
    """Ten impressions, from (.5, .5); computed from the formula of the step."""
    found = delay.em_step(TEN, law(0.5, 0.5))

    assert float(found.share) == pytest.approx(0.3645456829, abs=CLOSE)
    assert float(found.rate) == pytest.approx(0.3507111615, abs=CLOSE)


def test_the_most_likely_law_of_ten_impressions() -> None:
    """The root of the score equations, solved apart from this code to 40 digits; naive is .3."""
    found = delay.fit(TEN)

    assert float(found.share) == pytest.approx(0.3661928138, abs=CLOSE)
    assert float(found.rate) == pytest.approx(0.3222382862, abs=CLOSE)
    top = delay.log_likelihood(TEN, found.share, found.rate)
    assert float(top) == pytest.approx(-11.11909669, abs=5e-9)


def alone(delays: list[float], ages: list[float], share: float, rate: float) -> float:
    """Chapelle's log-likelihood, one impression after the other."""
    came = sum(math.log(share) + math.log(rate) - rate * d for d in delays)
    return came + sum(math.log(1 - share + share * math.exp(-rate * a)) for a in ages)


SOME_DELAYS = some.lists(some.floats(0.05, 10.0), min_size=1, max_size=8)
SOME_AGES = some.lists(some.floats(0.1, 20.0), min_size=1, max_size=12)


@given(SOME_DELAYS, SOME_AGES, some.floats(0.001, 0.999), some.floats(0.01, 20.0))
def test_log_likelihood_impression_by_impression(
    delays: list[float], ages: list[float], share: float, rate: float
) -> None:
    """Buckets and sums give what a loop over impressions gives."""
    data = delay.seen(len(delays), sum(delays), ages, [1] * len(ages))
    found = float(delay.log_likelihood(data, share, rate))

    assert found == pytest.approx(alone(delays, ages, share, rate), rel=1e-9, abs=1e-9)


@given(SOME_DELAYS, SOME_AGES, some.floats(0.0, 30.0), some.floats(0.1, 10.0))
def test_steps_never_lower_likelihood_times_prior(
    delays: list[float], ages: list[float], weight: float, prior_mean: float
) -> None:
    """Expectation and maximisation climbs, with and without prior, from any bad start."""
    data = delay.seen(len(delays), sum(delays), ages, [1] * len(ages))
    heights, now = [], law(0.9, 5.0)
    for _ in range(30):
        prior = weight * (math.log(float(now.rate)) - float(now.rate) * prior_mean)
        heights.append(float(delay.log_likelihood(data, *now)) + prior)
        now = delay.em_step(data, now, weight, prior_mean)

    assert all(b >= a - 1e-9 * (1 + abs(a)) for a, b in pairwise(heights))


@given(SOME_DELAYS, SOME_AGES, some.floats(0.0, 30.0), some.floats(0.1, 10.0))
def test_steps_stand_still_at_the_fitted_law(
    delays: list[float], ages: list[float], weight: float, prior_mean: float
) -> None:
    """What `fit` finds is a fixed point of expectation and maximisation, or at share 1."""
    data = delay.seen(len(delays), sum(delays), ages, [1] * len(ages))
    found = delay.fit(data, weight, prior_mean)
    after = delay.em_step(data, found, weight, prior_mean)

    assert float(after.share) == pytest.approx(float(found.share), rel=1e-6)
    assert float(after.rate) == pytest.approx(float(found.rate), rel=1e-6)


@pytest.mark.parametrize(("weight", "prior_mean"), [(0.0, 1.0), (5.0, 4.0), (50.0, 0.5)])
def test_fit_by_another_optimiser(weight: float, prior_mean: float) -> None:
    """scipy's simplex search on the loop over impressions ends at the same law."""
    delays = [0.2, 0.9, 1.1, 2.0, 3.0]
    ages = [0.5, 1.0, 2.0, 5.0, 9.0, 9.5, 14.0, 20.0]

    def depth(point: NDArray[np.float64]) -> float:
        share, rate = 1 / (1 + math.exp(-point[0])), math.exp(point[1])
        return -alone(delays, ages, share, rate) - weight * (math.log(rate) - rate * prior_mean)

    best = optimize.minimize(
        depth, [0.0, 0.0], method="Nelder-Mead", options={"xatol": 1e-10, "fatol": 1e-13}
    )
    found = delay.fit(delay.seen(5, sum(delays), ages, [1] * 8), weight, prior_mean)

    assert float(found.share) == pytest.approx(1 / (1 + math.exp(-best.x[0])), rel=1e-6)
    assert float(found.rate) == pytest.approx(math.exp(best.x[1]), rel=1e-6)


def test_nothing_converted_leaves_the_prior() -> None:
    """Without conversion the share is 0 and the rate the prior's, or 0 where there is none."""
    nothing = delay.seen([0, 0], [0, 0], [[1, 2], [1, 2]], [[5, 5], [0, 0]])

    assert delay.fit(nothing, 10.0, 4.0).rate.tolist() == [0.25, 0.25]
    assert delay.fit(nothing).rate.tolist() == [0.0, 0.0]
    assert delay.fit(nothing).share.tolist() == [0.0, 0.0]


def test_all_delays_of_nothing_end_at_a_finite_rate() -> None:
    """Conversions in the same instant give a very fast law, not an infinite one."""
    found = delay.fit(delay.seen(4, 0, [1, 2], [3, 3]))

    assert float(found.share) == pytest.approx(0.4)
    assert 1e3 < float(found.rate) < math.inf


def test_runs_together_fit_as_each_alone() -> None:
    """A leading axis of runs changes no digit."""
    generator = np.random.default_rng(5)
    counts = generator.integers(0, 50, (6, 9))
    converted, delays = generator.integers(0, 30, 6), generator.integers(30, 90, 6)
    ages = np.arange(1, 10)

    together = delay.fit(delay.seen(converted, delays, ages, counts), 2.0, 4.0)
    each = [
        delay.fit(delay.seen(c, d, ages, row), 2.0, 4.0)
        for c, d, row in zip(converted, delays, counts, strict=True)
    ]

    assert together.share.tolist() == pytest.approx([float(one.share) for one in each], rel=1e-13)
    assert together.rate.tolist() == pytest.approx([float(one.rate) for one in each], rel=1e-13)


def test_the_profile_is_the_best_share_for_each_rate() -> None:
    """scipy's bounded search over the share finds no higher likelihood, and the same one."""
    rates = [0.01, 0.1, 0.3222382862, 1.0, 5.0]
    heights = delay.profile(TEN, rates)
    for rate, height in zip(rates, heights, strict=True):
        best = optimize.minimize_scalar(
            lambda share, rate=rate: -float(delay.log_likelihood(TEN, share, rate)),
            bounds=(1e-9, 1 - 1e-12),
            method="bounded",
            options={"xatol": 1e-11},
        )
        assert float(height) == pytest.approx(-best.fun, abs=1e-7)
    assert float(heights[2]) == pytest.approx(-11.11909669, abs=5e-9)


def cohort(
    generator: Generator, runs: int, share: float, mean_delay: float, elapsed: float
) -> tuple[delay.Seen, NDArray[np.int64]]:
    """
    Impressions evenly spread since `elapsed`, windows of 1 not closed, in 25 buckets of age.

    Also gives all impressions by bucket, converted or not.
    """
    buckets, per_bucket = 25, 800
    ages = (np.arange(buckets) + 0.5) * elapsed / buckets
    exact = generator.uniform(-0.5, 0.5, (runs, buckets, per_bucket)) * elapsed / buckets
    exact += ages[:, None]
    delays = generator.exponential(mean_delay, exact.shape)
    came = (generator.random(exact.shape) < share) & (delays <= exact)
    delay_sum = np.where(came, delays, 0.0).sum(axis=(1, 2))
    counts = (~came).sum(axis=2)
    data = delay.seen(came.sum(axis=(1, 2)), delay_sum, ages, counts)
    return data, np.full((runs, buckets), per_bucket)


@pytest.mark.parametrize("elapsed", [0.5, 0.9])
@pytest.mark.parametrize("weight", [0.0, 20.0])
def test_correcting_for_delay_has_less_bias_than_the_naive_share(
    elapsed: float, weight: float
) -> None:
    """At 50 % and 90 % of the window, by simulation (1 in 20 converts, mean delay .3, 200 runs),
    also with a prior that is wrong by two thirds."""
    data, all_counts = cohort(np.random.default_rng(11), 200, 0.05, 0.3, elapsed)
    truth = 0.05 * -math.expm1(-1 / 0.3)
    mean_delay = 1.0 / delay.fit(data, weight, 0.5).rate
    corrected = data.converted / delay.exposure(data.ages, all_counts, mean_delay, 1.0)
    naive = data.converted / all_counts.sum(axis=-1)

    assert abs(corrected.mean() - truth) < 0.25 * abs(naive.mean() - truth)
    root_mean_square = [math.sqrt(np.mean((x - truth) ** 2)) for x in (corrected, naive)]
    assert root_mean_square[0] < root_mean_square[1]


def test_a_known_delay_leaves_no_bias() -> None:
    """With the true mean delay the mean of 400 runs lies within four standard errors."""
    data, all_counts = cohort(np.random.default_rng(12), 200, 0.05, 0.3, 0.5)
    truth = 0.05 * -math.expm1(-1 / 0.3)
    estimates = data.converted / delay.exposure(data.ages, all_counts, 0.3, 1.0)
    error = estimates.std(ddof=1) / math.sqrt(estimates.size)

    assert estimates.mean() == pytest.approx(truth, abs=4 * error)


@pytest.mark.parametrize(
    ("mean_delay", "elapsed", "told"), [(0.1, 0.9, True), (0.3, 0.9, True), (9.0, 0.2, False)]
)
def test_the_mean_delay_is_told_from_enough_data_only(
    mean_delay: float, elapsed: float, told: bool
) -> None:
    """A thousand conversions tell a short delay; from its first fiftieth a long one is not told."""
    data, _ = cohort(np.random.default_rng(13), 8, 0.2, mean_delay, elapsed)

    assert delay.identified(data).tolist() == [float(told)] * 8


def test_too_few_conversions_tell_no_delay() -> None:
    """Neither none nor two among many open impressions fix the mean delay."""
    data = delay.seen([0, 2], [0, 1], [0.5, 1.0], [[500, 500], [500, 500]])

    assert delay.identified(data).tolist() == [0.0, 0.0]


def test_exposure_without_window() -> None:
    """Vernade, Cappé, Perchet, UAI 2017: five impressions of ages 0..4, 1 - 2^-(k+1) of whose
    conversions have come: 4.03125, and 2 conversions give 0.496124031; computed by hand."""
    found = delay.exposure([1, 2, 3, 4, 5], [1] * 5, 1 / math.log(2))

    assert float(found) == pytest.approx(4.03125, abs=1e-14)
    assert 2 / float(found) == pytest.approx(0.496124031, abs=CLOSE)


def test_exposure_is_whole_when_the_window_has_closed() -> None:
    """At and past the window each impression counts as one, whatever the delay."""
    found = delay.exposure([10, 25], [3, 4], [0.01, 5.0, 1e9, math.inf], 10.0)

    assert found.tolist() == pytest.approx([7.0] * 4, rel=1e-12)


@given(some.floats(0.0, 30.0), some.floats(1e7, 1e12))
def test_long_delays_come_evenly(age: float, mean_delay: float) -> None:
    """As the mean delay grows the share that came approaches that of a delay without end."""
    even = float(delay.arrived_share(age, math.inf, 20.0))

    assert even == pytest.approx(min(age, 20.0) / 20.0)
    assert float(delay.arrived_share(age, mean_delay, 20.0)) == pytest.approx(even, abs=1e-5)


def test_radius_and_upper_bound() -> None:
    """On the five impressions above, delta = .01; computed from the formulas."""
    radius = delay.vernade_radius(5, 4.03125, 0.01)
    upper = delay.poisson_upper(2 / 4.03125, 4.03125, 0.01)

    assert float(radius) == pytest.approx(0.8416918356, abs=CLOSE)
    assert float(upper) == pytest.approx(2.425907681, abs=CLOSE)


@given(some.floats(-9.0, 0.5), some.floats(-3.0, 8.0), some.floats(1e-9, 0.5))
def test_the_upper_bound_solves_its_equation(small: float, size: float, delta: float) -> None:
    """Brent's method on the same divergence finds the same root."""
    theta, exposed = math.pow(10.0, small), math.pow(10.0, size)
    found = float(delay.poisson_upper(theta, exposed, delta))
    level = math.log(1 / delta) / exposed

    def excess(x: float) -> float:
        return x - theta * math.log1p(x / theta) - level

    root = optimize.brentq(excess, 0.0, 2 * (found - theta) + level, xtol=1e-18, rtol=1e-14)
    assert found - theta == pytest.approx(float(root), rel=1e-6)


def test_the_upper_bound_without_conversion_or_exposure() -> None:
    """Without conversion it is ln(1/delta) / exposure, in closed form; without exposure, none."""
    found = delay.poisson_upper([0.0, 0.0], [50.0, 0.0], 0.05)

    assert found.tolist() == [pytest.approx(math.log(20) / 50), math.inf]
    assert float(delay.vernade_radius(0, 0, 0.05)) == math.inf


def test_outstanding_bound() -> None:
    """Joulani, György, Szepesvári, ICML 2013: 10,000 rounds, mean delay 100; computed from the
    formula."""
    assert float(delay.outstanding_bound(10_000, 100)) == pytest.approx(180.1177659, abs=5e-8)


def test_outstanding_bound_holds_in_a_simulation() -> None:
    """The mean over 50 runs of the largest number outstanding stays under the bound."""
    generator = np.random.default_rng(14)
    largest = []
    for _ in range(50):
        arrival = np.arange(2000) + generator.geometric(1 / 30, 2000)
        arrived = np.searchsorted(np.sort(arrival), np.arange(2000), side="right")
        largest.append(int((np.arange(1, 2001) - arrived).max()))

    assert 30 < np.mean(largest) < float(delay.outstanding_bound(2000, 30))
