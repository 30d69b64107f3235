"""Intervals for a rate from counts that hold at every moment; apart from those from a variance.

Howard, Ramdas, McAuliffe, Sekhon, "Time-uniform, nonparametric, nonasymptotic confidence
sequences", Ann. Statist. 49(2):1055-1080, 2021: a mixture of likelihood ratios is a
supermartingale under the true rate, so by Ville's inequality it ever reaches 1 / alpha with
probability alpha at most, and the rates it has not reached form the interval. Sub-Gaussian
boundaries say nothing about rare values; these do.

Why one side's root is found by Newton's steps alone is our own derivation: with the mixture
centred at the rate p, its logarithm is a sum of terms ln(M + i / p), ln(M + j / (1 - p)) and a
line in p. Each is convex in p and in ln p, so from outside the interval the steps climb to
its edge and never pass it. With a count of 1 or less it only rises in p: no lower edge.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from service.learner.arrays import Numbers, double, doubles, together
from service.learner.sequences import ALPHA, mixture_rho

STEPS_MAX = 200
STANDS_STILL = 1e-13
WEIGHT_MIN = 1e-3  # The least weight of a mixture, as in confseq, the library of the authors.
STIRLING_FROM = 2e3
FAR = 60.0  # An edge below e^-60 of the mean is no edge; it is given as 0.

BERNOULLI_ASSUMES = (
    "values between 0 and the largest one, each with the same mean whatever came before; "
    "holds at every moment at once, however often it is read"
)
POISSON_ASSUMES = (
    "conversions come at one unchanging rate per unit of exposure, whatever came before, with a "
    "law of delays that was known beforehand; holds at every moment at once, however often it "
    "is read"
)


def bernoulli_evidence(
    successes: ArrayLike, trials: ArrayLike, rate: ArrayLike, weight: ArrayLike
) -> Numbers:
    """
    The logarithm of the beta-binomial mixture against one rate.

    A supermartingale for values between 0 and 1, each with mean `rate` whatever came before.

    Args:
        successes: Sum of the values; a count when they are 0 or 1.
        trials: Their number.
        rate: The rate spoken against, strictly between 0 and 1.
        weight: Weight M of the mixture Beta(M rate, M (1 - rate)); see `bernoulli_weight`.
    """
    s, n, p, m = doubles(successes, trials, rate, weight)
    return _bernoulli(s, n, p, 1.0 - p, m)


def bernoulli_weight(tuned_for: ArrayLike, alpha: float = ALPHA) -> Numbers:
    """The M that makes the interval narrowest at so many trials, in effect a sample of its own."""
    return np.maximum(mixture_rho(tuned_for, alpha) - 1.0, WEIGHT_MIN)


def bernoulli_interval(
    successes: ArrayLike, trials: ArrayLike, alpha: float, tuned_for: ArrayLike
) -> tuple[Numbers, Numbers]:
    """
    Limits for a rate, or a mean of values between 0 and 1; right at all moments at once.

    0 and 1 while there is no trial. Needs `BERNOULLI_ASSUMES`.

    Args:
        successes: Sum of the values; a count when they are 0 or 1.
        trials: Their number.
        alpha: Chance of ever being wrong, on either side.
        tuned_for: Trials at which to be narrowest, fixed beforehand; right at every other.
    """
    s, n, m = together(successes, trials, bernoulli_weight(tuned_for, alpha))
    # By Ville's inequality the evidence ever comes so high with chance alpha at most.
    level = math.log(1.0 / alpha)
    return np.exp(_bernoulli_low(s, n, m, level)), -np.expm1(_bernoulli_low(n - s, n, m, level))


def _bernoulli_low(s: Numbers, n: Numbers, m: Numbers, level: float) -> Numbers:
    # The logarithm of the lower limit; the upper one is that of the failures, mirrored.
    some = s > 1.0
    count, trials = np.where(some, s, 2.0), np.where(some, n, 4.0)

    def excess(u: Numbers) -> tuple[Numbers, Numbers]:
        p, q = np.exp(u), -np.expm1(u)
        height = _bernoulli(count, trials, p, q, m) - level
        return height, p * _bernoulli_slope(count, trials, p, q, m)

    # Where all trials succeeded the evidence is least at 1 itself, where it has no slope.
    top = np.minimum(np.log(count / trials), -1e-12)
    edge, outside = _climb(excess, top - FAR)
    return np.where(some & outside, edge, -np.inf)


def _bernoulli(s: Numbers, n: Numbers, p: Numbers, q: Numbers, m: Numbers) -> Numbers:
    return _growth(m * p, s) + _growth(m * q, n - s) - _growth(m, n)


def _bernoulli_slope(s: Numbers, n: Numbers, p: Numbers, q: Numbers, m: Numbers) -> Numbers:
    of_successes = special.psi(m * p + s) - special.psi(m * p)
    of_failures = special.psi(m * q + n - s) - special.psi(m * q)
    return double(m * (of_successes - of_failures) - s / p + (n - s) / q)


def poisson_evidence(
    count: ArrayLike, exposure: ArrayLike, rate: ArrayLike, weight: ArrayLike
) -> Numbers:
    """
    The logarithm of the Gamma-Poisson mixture against one rate.

    A supermartingale for a Poisson count of `rate` per unit of exposure; and for values between
    0 and 1 with mean `rate` and an exposure of 1 each, since E (q/p)^x e^(p-q) is 1 at most.

    Args:
        count: Conversions, or a sum of values between 0 and 1.
        exposure: Wins, or wins weighed by how much of their conversions had time to come.
        rate: The rate spoken against, above 0.
        weight: Weight M, in units of exposure, of the mixture Gamma(M rate, M); see
            `poisson_weight`.
    """
    k, n, p, m = doubles(count, exposure, rate, weight)
    return _growth(m * p, k) - k * np.log1p(n / m) + p * (n - m * np.log1p(n / m))


def poisson_weight(tuned_for: ArrayLike, alpha: float = ALPHA) -> Numbers:
    """The M that makes the interval narrowest at so much exposure."""
    return np.maximum(mixture_rho(tuned_for, alpha), WEIGHT_MIN)


def poisson_interval(
    count: ArrayLike, exposure: ArrayLike, alpha: float, tuned_for: ArrayLike
) -> tuple[Numbers, Numbers]:
    """
    Limits for a rate per unit of exposure, fractions of it too; right at all moments at once.

    0 and infinity without exposure. Needs `POISSON_ASSUMES`. Where each of the wins that are
    still open converts at most once, the promise holds but for a share of about the rate.

    Args:
        count: Conversions seen.
        exposure: Wins, each weighed by the share of its conversions that had time to come.
        alpha: Chance of ever being wrong, on either side.
        tuned_for: Exposure at which to be narrowest, fixed beforehand; right at every other.
    """
    k, given, m = together(count, exposure, poisson_weight(tuned_for, alpha))
    exposed = given > 0.0
    n = np.where(exposed, given, 1.0)
    level = math.log(1.0 / alpha)
    low, high = _poisson_low(k, n, m, level), _poisson_high(k, n, m, level)
    return np.where(exposed, low, 0.0), np.where(exposed, high, np.inf)


def _poisson_low(k: Numbers, n: Numbers, m: Numbers, level: float) -> Numbers:
    some = k > 1.0
    count = np.where(some, k, 2.0)

    def excess(u: Numbers) -> tuple[Numbers, Numbers]:
        p = np.exp(u)
        return poisson_evidence(count, n, p, m) - level, p * _poisson_slope(count, n, p, m)

    edge, outside = _climb(excess, np.log(count / n) - FAR)
    return np.where(some & outside, np.exp(edge), 0.0)


def _poisson_high(k: Numbers, n: Numbers, m: Numbers, level: float) -> Numbers:
    def excess(minus: Numbers) -> tuple[Numbers, Numbers]:
        return poisson_evidence(k, n, -minus, m) - level, -_poisson_slope(k, n, -minus, m)

    # Gamma(x + k) / Gamma(x) is x^k or more, so here the evidence is the level or more.
    furthest = (level + k * np.log1p(n / m)) / (n - m * np.log1p(n / m))
    return -_climb(excess, -furthest)[0]


def _poisson_slope(k: Numbers, n: Numbers, p: Numbers, m: Numbers) -> Numbers:
    of_count = special.psi(m * p + k) - special.psi(m * p)
    return double(m * of_count - k / p + (n - m * np.log1p(n / m)))


def _growth(x: Numbers, k: Numbers) -> Numbers:
    # ln of Gamma(x + k) / (Gamma(x) x^k). For large x the two differ in their last digits
    # only, so there by Stirling's series, to 1e-12.
    large = x > STIRLING_FROM
    y, z = np.where(large, x, 1.0), np.where(large, 1.0, x)
    series = (y + k - 0.5) * np.log1p(k / y) - k + (1.0 / (y + k) - 1.0 / y) / 12.0
    plain = special.gammaln(z + k) - special.gammaln(z) - k * np.log(z)
    return np.where(large, series, plain)


def _climb(
    excess: Callable[[Numbers], tuple[Numbers, Numbers]], start: Numbers
) -> tuple[Numbers, NDArray[np.bool_]]:
    # From an excess above 0, falling and convex, up to its root; says too where that was so.
    at = start
    height, slope = excess(at)
    outside = (height > 0.0) & (slope < 0.0)
    for _ in range(STEPS_MAX):
        falling = (height > 0.0) & (slope < 0.0)
        step = np.where(falling, height / np.where(falling, -slope, 1.0), 0.0)
        at = at + step
        if np.all(step <= STANDS_STILL * np.abs(at)):
            break
        height, slope = excess(at)
    return at, outside
