"""Optimistic indices beside UCBid and klUCBid, apart because each needs more than a mean.

Elementwise like `bounds.py`: one number from the service, one array from a rehearsal, the
same formula. Values are shares of a ceiling; the number of known values may be fractional,
as a discounted sum is. With nothing known an index is at its top: 1 where it is clipped,
infinite where it is not.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from service.learner.arrays import Numbers, double, doubles
from service.learner.bounds import kl_upper

SMALLEST_KNOWN = 1e-100  # Below it quotients or their squares overflow.


def bernstein_ucbid_index(
    mean: ArrayLike, variance: ArrayLike, rounds: ArrayLike, known: ArrayLike, gamma: float
) -> Numbers:
    """
    min{1, mean + sqrt(2 W L / N) + 3 L / N} with L = ln(3 t^gamma), and 1 while nothing is known.

    Achddou, Cappé, Garivier, "Efficient Algorithms for Stochastic Repeated Second-price
    Auctions", ALT 2021 (Bernstein-UCBid; its theorem wants gamma > 2).

    Args:
        mean: Mean of the known values.
        variance: Their variance W, divided by their number and not by one less.
        rounds: Number t of the round to be bid in, from 1.
        known: Number N of known values.
        gamma: Weight of the bonus.
    """
    average, t = doubles(mean, rounds)
    bonus = _bernstein(variance, known, np.log(3.0) + gamma * np.log(t), 3.0)
    return np.minimum(average + bonus, 1.0)


def ucb_v_index(
    mean: ArrayLike,
    variance: ArrayLike,
    rounds: ArrayLike,
    known: ArrayLike,
    zeta: float = 1.2,
    width: float = 1.0,
) -> Numbers:
    """
    mean + sqrt(2 V E / N) + 3 width E / N with E = zeta ln t; not clipped.

    Audibert, Munos, Szepesvári, "Exploration-exploitation tradeoff using variance estimates in
    multi-armed bandits", Theoretical Computer Science 410(19):1876-1902, 2009 (c = 1).
    Arguments as for `bernstein_ucbid_index`; `width` is the range of one value.
    """
    average, t = doubles(mean, rounds)
    return average + _bernstein(variance, known, zeta * np.log(t), 3.0 * width)


def audibert_radius(
    variance: ArrayLike, known: ArrayLike, delta: float, width: float = 1.0
) -> Numbers:
    """
    sqrt(2 V x / N) + 3 width x / N with x = ln(3 / delta), to both sides of the mean.

    Audibert, Munos, Szepesvári 2009, as `ucb_v_index`: wrong with probability delta at most, at
    one number of values fixed beforehand. `variance` is divided by their number.
    """
    return _bernstein(variance, known, np.log(3.0 / delta), 3.0 * width)


def maurer_pontil_radius(unbiased_variance: ArrayLike, known: ArrayLike, delta: float) -> Numbers:
    """
    sqrt(2 U x / N) + 7 x / (3 (N - 1)) with x = ln(2 / delta), to one side of the mean.

    Maurer, Pontil, "Empirical Bernstein Bounds and Sample Variance Penalization", COLT 2009:
    wrong with probability delta at most, at one number of values fixed beforehand; infinite
    up to one value. `unbiased_variance` is divided by one less than their number.
    """
    variance, n = doubles(unbiased_variance, known)
    several = np.maximum(n - 1.0, SMALLEST_KNOWN)
    x = np.log(2.0 / delta)
    radius = np.sqrt(2.0 * variance * x / (several + 1.0)) + 7.0 * x / (3.0 * several)
    return np.where(n > 1.0, radius, np.inf)


def hoeffding_radius(known: ArrayLike, delta: float) -> Numbers:
    """
    sqrt(ln(1 / delta) / (2 N)), to one side of the mean; delta / 2 for both sides.

    Hoeffding, "Probability inequalities for sums of bounded random variables", Journal of the
    American Statistical Association 58(301):13-30, 1963, for values between 0 and 1.
    """
    n = double(known)
    radius = np.sqrt(np.log(1.0 / delta) / (2.0 * np.maximum(n, SMALLEST_KNOWN)))
    return np.where(n > 0.0, radius, np.inf)


def kl_ucb_index(mean: ArrayLike, rounds: ArrayLike, known: ArrayLike, c: float = 0.0) -> Numbers:
    """
    The largest q with N kl(mean, q) <= ln t + c ln ln t, and 1 while nothing is known.

    Garivier, Cappé, "The KL-UCB algorithm for bounded stochastic bandits and beyond", COLT
    2011: its theorem has c = 3, its authors advise c = 0. Below t = e the second logarithm
    is left out, where it would be negative.
    """
    t, n = doubles(rounds, known)
    once = np.log(t)
    level = once + c * np.log(np.maximum(once, 1.0))
    index = kl_upper(mean, level / np.maximum(n, SMALLEST_KNOWN))
    return np.where(n > 0.0, index, 1.0)


def bayes_ucb_beta(
    successes: ArrayLike,
    failures: ArrayLike,
    rounds: ArrayLike,
    horizon: ArrayLike,
    c: float = 0.0,
    prior: tuple[float, float] = (1.0, 1.0),
) -> Numbers:
    """
    The quantile of order 1 - 1 / (t (ln n)^c) of Beta(a + successes, b + failures).

    Kaufmann, Cappé, Garivier, "On Bayesian Upper Confidence Bounds for Bandit Problems",
    AISTATS 2012: its theorem has c >= 5, in practice c = 0. In round 1 with c = 0 the order
    is 0, and so is the index.

    Args:
        successes: Sum of the known values; a count when they are 0 or 1.
        failures: Their number less that sum.
        rounds: Number t of the round, from 1.
        horizon: Number n of rounds to be played; without weight when c = 0.
        c: Power of the logarithm of the horizon.
        prior: The pair a, b, both above 0.
    """
    s, f, t, n = doubles(successes, failures, rounds, horizon)
    above = np.minimum(1.0 / (t * np.log(n) ** c), 1.0)
    # From the upper tail: 1 - above loses its digits in a long run.
    return double(special.betainccinv(prior[0] + s, prior[1] + f, above))


def _bernstein(variance: ArrayLike, known: ArrayLike, x: ArrayLike, slope: float) -> Numbers:
    v, n, level = doubles(variance, known, x)
    share = level / np.maximum(n, SMALLEST_KNOWN)
    return np.where(n > 0.0, np.sqrt(2.0 * v * share) + slope * share, np.inf)
