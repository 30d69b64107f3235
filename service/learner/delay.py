"""What conversions on their way are worth, from bucketed counts, apart from values that are known.

Elementwise over leading axes (one line item, or all runs of a rehearsal); where impressions
lie in buckets of age, the buckets are the last axis. Ages, delays and windows have any one
unit of time, a rate is one over that unit, and counts may be fractional.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from service.learner.arrays import Numbers, double, doubles

SMALLEST = 1e-250
CLOSEST = 1e-12  # No share is nearer to 1.
FASTEST = 1e9  # Delays of nothing would make the rate infinite; it stops here, per oldest age.
NEWTON_STEPS = 12
HALVINGS = 44
PROFILE_POINTS = 33
# Half the 95 % quantile of chi-square with one degree: the edge of a likelihood interval.
FALL = 1.92


class Seen(NamedTuple):
    """
    What is known of a set of impressions.

    Args:
        converted: Number that converted.
        delay_sum: Sum of the delays of those; above 0 when there are any.
        ages: Age of each bucket of those that did not, the oldest above 0; an impression whose
            window has closed stays at the age it closed at.
        counts: Number of those in each bucket.
    """

    converted: Numbers
    delay_sum: Numbers
    ages: Numbers
    counts: Numbers


class Law(NamedTuple):
    """Share of impressions that ever convert, and the rate (one over the mean) of their delays."""

    share: Numbers
    rate: Numbers


def seen(converted: ArrayLike, delay_sum: ArrayLike, ages: ArrayLike, counts: ArrayLike) -> Seen:
    """Gather plain numbers and arrays; see `Seen`."""
    return Seen(*doubles(converted, delay_sum, ages, counts))


def log_likelihood(data: Seen, share: ArrayLike, rate: ArrayLike) -> Numbers:
    """
    Sum of ln p + ln r - r d over conversions and of ln(1 - p + p e^(-r a)) over the rest.

    Chapelle, "Modeling delayed feedback in display advertising", KDD 2014, without features:
    an impression converts with chance p = `share`, after an exponential delay of `rate` r.
    """
    p, r = doubles(share, rate)
    came = special.xlogy(data.converted, p) + special.xlogy(data.converted, r)
    absent = p[..., None] * np.expm1(-r[..., None] * data.ages)
    return double(came - r * data.delay_sum + special.xlog1py(data.counts, absent).sum(axis=-1))


def em_step(
    data: Seen, law: Law, prior_weight: ArrayLike = 0.0, prior_mean_delay: ArrayLike = 0.0
) -> Law:
    """
    One step of expectation and maximisation; it never lowers the likelihood times the prior.

    An impression without conversion counts as converting later with its chance w = p e^(-r a)
    / (1 - p + p e^(-r a)); then p = (converted + sum w) / n and r = converted / (delays + sum
    w a). Chapelle, KDD 2014, without features.

    Args:
        data: What is known.
        law: The law to start from.
        prior_weight: Conversions that the prior of the rate is worth; 0 for none.
        prior_mean_delay: Mean delay of those.
    """
    weight, prior_mean = doubles(prior_weight, prior_mean_delay)
    later = data.counts * will_convert(data.ages, Law(law.share[..., None], law.rate[..., None]))
    impressions = data.converted + data.counts.sum(axis=-1)
    share = (data.converted + later.sum(axis=-1)) / np.maximum(impressions, SMALLEST)
    waited = data.delay_sum + (later * data.ages).sum(axis=-1) + weight * prior_mean
    conversions = data.converted + weight
    fastest = FASTEST / data.ages.max(axis=-1)
    rate = conversions / np.maximum(waited, np.maximum(conversions, 1.0) / fastest)
    return Law(share, double(rate))


def will_convert(age: ArrayLike, law: Law) -> Numbers:
    """The chance that an impression of this age without conversion still converts."""
    # The w of `em_step`, written so that no exponential overflows.
    return double(special.expit(special.logit(law.share) - law.rate * double(age)))


def fit(
    data: Seen,
    prior_weight: ArrayLike = 0.0,
    prior_mean_delay: ArrayLike = 0.0,
    halvings: int = HALVINGS,
) -> Law:
    """
    The most likely law; with a prior weight the most likely after a Gamma prior of the rate.

    It is where `em_step` stands still. Those steps need thousands when most conversions are
    still to come, so the top of the profile likelihood is found instead: on a grid of rates
    first, as it may have two tops, then by halving the sign of its slope.

    Where nothing has converted the share is 0 and the rate that of the prior, or 0 (a mean
    delay without end) when there is none. Where `identified` says no, the result without
    prior says little.

    Args:
        data: What is known.
        prior_weight: Conversions that the prior of the rate is worth; 0 for none.
        prior_mean_delay: Mean delay of those.
        halvings: How often the span of the grid is halved; a dozen are plenty for a bid.
    """
    weight, prior_mean = doubles(prior_weight, prior_mean_delay)
    some = data.converted > 0.0
    low, high = (np.log(x) for x in _cell_of_the_top(data, weight, prior_mean))
    for _ in range(halvings):
        middle = 0.5 * (low + high)
        law = _best_for(data, np.exp(middle))
        rising = _rises(data, law, weight, prior_mean)
        low, high = np.where(rising, middle, low), np.where(rising, high, middle)
    law = _best_for(data, np.exp(0.5 * (low + high)))
    waited = weight * prior_mean
    of_prior = weight / np.where(waited > 0.0, waited, np.inf)
    return Law(np.where(some, law.share, 0.0), np.where(some, law.rate, of_prior))


def _cell_of_the_top(data: Seen, weight: Numbers, prior_mean: Numbers) -> tuple[Numbers, Numbers]:
    # Every rate at which the slope can vanish lies between these two.
    waited = data.delay_sum + weight * prior_mean
    conversions = np.maximum(data.converted + weight, 1.0)
    oldest = data.ages.max(axis=-1)
    slowest = conversions / (waited + (data.counts * data.ages).sum(axis=-1) + oldest)
    fastest = conversions / np.maximum(waited, conversions * oldest / FASTEST)
    share = np.linspace(0.0, 1.0, PROFILE_POINTS)
    rates = np.exp(np.log(slowest[..., None]) * (1.0 - share) + np.log(fastest[..., None]) * share)
    # The logarithm of the Gamma prior, but for a constant.
    of_prior = weight[..., None] * (np.log(rates) - rates * prior_mean[..., None])
    top = np.argmax(profile(data, rates) + of_prior, axis=-1)[..., None]
    beside = (np.maximum(top - 1, 0), np.minimum(top + 1, PROFILE_POINTS - 1))
    low, high = (np.take_along_axis(rates, at, axis=-1)[..., 0] for at in beside)
    return low, high


def _rises(data: Seen, law: Law, weight: Numbers, prior_mean: Numbers) -> NDArray[np.bool_]:
    later = will_convert(data.ages, Law(law.share[..., None], law.rate[..., None]))
    waited = data.delay_sum + weight * prior_mean + (data.counts * later * data.ages).sum(axis=-1)
    return np.asarray(data.converted + weight > law.rate * waited, dtype=np.bool_)


def _best_for(data: Seen, rate: Numbers) -> Law:
    # With z = 1 / share the best share solves converted = F(z) = sum of c g / (z - g), where g
    # is the share that came. 1 / F is concave and nearly straight, so Newton's steps on it
    # climb to the root after the first and are there in a few.
    still = np.exp(-rate[..., None] * data.ages)
    weight = -data.counts * np.expm1(-rate[..., None] * data.ages)
    converted = np.where(data.converted > 0.0, data.converted, 1.0)
    over = data.counts.sum(axis=-1) / converted * np.ones_like(rate)  # z - 1, from the naive share
    for _ in range(NEWTON_STEPS):
        apart = np.maximum(over, CLOSEST)[..., None] + still
        total, square = (weight / apart).sum(axis=-1), (weight / apart**2).sum(axis=-1)
        step = total * (1.0 - total / converted) / np.maximum(square, SMALLEST)
        over = np.maximum(over - step, CLOSEST)
    return Law(np.where(data.converted > 0.0, 1.0 / (1.0 + over), 0.0), rate)


def profile(data: Seen, rates: ArrayLike) -> Numbers:
    """The log-likelihood of each rate with the best share for it; the rates are the last axis."""
    wide = Seen(*(x[..., None] for x in data[:2]), *(x[..., None, :] for x in data[2:]))
    return log_likelihood(wide, *_best_for(wide, double(rates)))


def identified(data: Seen, shortest: float = 1e-3, longest: float = 10.0) -> Numbers:
    """
    1 where the data tell the mean delay within a wide range, 0 where only a prior could.

    They do when the profile likelihood falls by 1.92 or more from its top to both ends.

    Args:
        data: What is known.
        shortest: Lower end of the range of mean delays, in oldest ages.
        longest: Upper end; from about ten oldest ages on, delays all look the same.
    """
    spans = np.geomspace(longest, shortest, PROFILE_POINTS)
    oldest = data.ages.max(axis=-1)
    heights = profile(data, 1.0 / (spans * oldest[..., None]))
    falls = heights.max(axis=-1, keepdims=True) - heights[..., [0, -1]]
    return double((falls >= FALL).all(axis=-1))


def arrived_share(age: ArrayLike, mean_delay: ArrayLike, window: float = np.inf) -> Numbers:
    """
    (1 - e^(-a/m)) / (1 - e^(-window/m)) at a = min(age, window): the conversions that came.

    Of those that come within the window; without window, of all. With a mean delay without
    end they come evenly, a / window.
    """
    a, m = doubles(np.minimum(age, window), mean_delay)
    if m.ndim == 0 and m < np.inf:
        return double(np.expm1(-a / m) / np.expm1(-window / m))
    ends = np.isfinite(m)
    finite = np.where(ends, m, 1.0)
    share = np.expm1(-a / finite) / np.expm1(-window / finite)
    return np.where(ends, share, a / window)


def exposure(
    ages: ArrayLike, counts: ArrayLike, mean_delay: ArrayLike, window: float = np.inf
) -> Numbers:
    """
    Impressions, each weighed by the share of its conversions that had time to come.

    Conversions over exposure estimate the conversions per impression within the window.
    Vernade, Cappé, Perchet, "Stochastic Bandit Models for Delayed Conversions", UAI 2017, have
    the form without window, for a known law of delays; the window is our own addition.

    Args:
        ages: Age of each bucket of impressions, converted or not; the last axis.
        counts: Their number.
        mean_delay: Mean of the exponential delay, in the unit of the ages; may be infinite.
        window: Age past which a conversion no longer counts.
    """
    share = arrived_share(ages, double(mean_delay)[..., None], window)
    return double((double(counts) * share).sum(axis=-1))


def vernade_radius(impressions: ArrayLike, exposed: ArrayLike, delta: float) -> Numbers:
    """
    sqrt(N ln(1 / delta) / 2) / exposure, to one side of conversions over exposure.

    Hoeffding's inequality on the model of Vernade, Cappé, Perchet, UAI 2017: at one moment
    fixed beforehand, for a known law of delays. Infinite without exposure.
    """
    n, e = doubles(impressions, exposed)
    radius = np.sqrt(n * np.log(1.0 / delta) / 2.0) / np.where(e > 0.0, e, 1.0)
    return np.where(e > 0.0, radius, np.inf)


def poisson_upper(theta: ArrayLike, exposed: ArrayLike, delta: float) -> Numbers:
    """
    The largest q with exposure d(theta, q) <= ln(1 / delta), d(a, b) = a ln(a/b) + b - a.

    Vernade, Cappé, Perchet, UAI 2017 (the index by Poisson's divergence); not clipped at 1,
    infinite without exposure. Newton's steps from the right on a convex function.
    """
    a, e = doubles(theta, exposed)
    d = np.log(1.0 / delta) / np.where(e > 0.0, e, 1.0)
    some = np.where(a > 0.0, a, 1.0)
    # Not left of the root, since d(a, a + x) >= x^2 / (2 (a + x)).
    x = d + np.sqrt(d * d + 2.0 * some * d)
    for _ in range(NEWTON_STEPS):
        x = x - (x - some * np.log1p(x / some) - d) * (some + x) / x
    return np.where(e > 0.0, np.where(a > 0.0, a + x, d), np.inf)


def outstanding_bound(rounds: ArrayLike, mean_delay: ArrayLike) -> Numbers:
    """
    1 + m + 2 ln n + sqrt(4 m ln n): at most so many outcomes are ever outstanding, on average.

    Joulani, György, Szepesvári, "Online Learning under Delayed Feedback", ICML 2013: the mean
    of the largest number outstanding in n rounds with alike independent delays of mean m
    rounds; the regret of a stochastic method grows by no more than this times its gap.
    """
    n, m = doubles(rounds, mean_delay)
    return double(1.0 + m + 2.0 * np.log(n) + np.sqrt(4.0 * m * np.log(n)))
