"""Boundaries that hold at every moment at once, from a variance; apart from those for counts.

Howard, Ramdas, McAuliffe, Sekhon, "Time-uniform, nonparametric, nonasymptotic confidence
sequences", Ann. Statist. 49(2):1055-1080, 2021: with probability 1 - alpha a centred sum never
leaves its boundary, which depends on the variance v it has gathered. An interval made for
one moment fixed beforehand is wrong when it is read again and again; these are not.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from service.learner.arrays import Numbers, double, doubles

ALPHA = 0.05
STITCHING_POWER = 1.4
STITCHING_FACTOR = 2.0
VARIANCE_BOUNDED = 0.25  # Of a value between 0 and 1, at most; it is sub-Gaussian with as much.


def polynomial_stitching(
    variance: ArrayLike, alpha: float, variance_min: ArrayLike, scale: float = 0.0
) -> Numbers:
    """
    The one-sided boundary sqrt(k1^2 v l + (k2 c l)^2) + k2 c l.

    With l = s ln ln(eta v / v_min) + ln(zeta(s) / (alpha (ln eta)^s)), s = 1.4, eta = 2,
    k1 = (eta^(1/4) + eta^(-1/4)) / sqrt 2 and k2 = (sqrt(eta) + 1) / 2; below v_min as there.

    Args:
        variance: Variance v gathered by the sum.
        alpha: Chance of ever being above; half of it for each of two sides.
        variance_min: Variance from which the boundary is made to be narrow, above 0.
        scale: The c of sub-gamma sums; 0 for sub-Gaussian ones.
    """
    least = double(variance_min)
    v = np.maximum(double(variance), least)
    eta, s = STITCHING_FACTOR, STITCHING_POWER
    constant = math.log(float(special.zeta(s, 1.0)) / (alpha * math.log(eta) ** s))
    level = s * np.log(np.log(eta * v / least)) + constant
    k1 = (eta**0.25 + eta**-0.25) / math.sqrt(2.0)
    linear = 0.5 * (math.sqrt(eta) + 1.0) * scale * level
    return double(np.sqrt(k1 * k1 * v * level + linear * linear) + linear)


def normal_mixture(variance: ArrayLike, alpha: float, variance_best: ArrayLike) -> Numbers:
    """
    sqrt((v + rho)(ln(1 + v / rho) + 2 ln(1 / alpha))), the two-sided normal mixture boundary.

    Args:
        variance: Variance v gathered by the sum, sub-Gaussian.
        alpha: Chance of ever being outside, on either side.
        variance_best: Variance at which the boundary is narrowest; see `mixture_rho`.
    """
    v, rho = double(variance), mixture_rho(variance_best, alpha)
    return double(np.sqrt((v + rho) * (np.log1p(v / rho) + 2.0 * math.log(1.0 / alpha))))


def mixture_rho(variance_best: ArrayLike, alpha: float) -> Numbers:
    """v / (2 ln(1 / alpha) + ln(1 + 2 ln(1 / alpha))), the variance a mixture starts with."""
    doubled = 2.0 * math.log(1.0 / alpha)
    return double(double(variance_best) / (doubled + math.log1p(doubled)))


def bounded_half_width(known: ArrayLike, tuned_for: ArrayLike, alpha: float = ALPHA) -> Numbers:
    """
    To either side of the mean of values between 0 and 1, whatever their law; infinite for none.

    Args:
        known: Number of values.
        tuned_for: Number at which to be narrowest; right at every other.
        alpha: Chance of ever being wrong.
    """
    n, tuned = doubles(known, tuned_for)
    width = normal_mixture(VARIANCE_BOUNDED * n, alpha, VARIANCE_BOUNDED * tuned)
    return np.where(n > 0.0, width / np.where(n > 0.0, n, 1.0), np.inf)


def variance_step(
    known: ArrayLike, amount: ArrayLike, variance: ArrayLike, value: ArrayLike
) -> tuple[Numbers, Numbers, Numbers]:
    """
    Number, sum and gathered variance after one more value between 0 and 1.

    The variance gathers (x - m)^2 with m the mean of the values before, 1/2 at first: it has to
    be foretold, so it depends on the order of the values, and all three start from 0.
    """
    n, total, v, x = doubles(known, amount, variance, value)
    before = np.where(n > 0.0, total / np.where(n > 0.0, n, 1.0), 0.5)
    return n + 1.0, total + x, v + (x - before) ** 2


def empirical_bernstein_half_width(
    known: ArrayLike, variance: ArrayLike, variance_min: ArrayLike, alpha: float = ALPHA
) -> Numbers:
    """
    To either side of the mean of values between 0 and 1; infinite while there are none.

    Howard et al. 2021, Theorem 4 with the stitching boundary, c = 1, alpha / 2 on each side.
    Narrower than `bounded_half_width` only once the number times the variance is large.

    Args:
        known: Number of values.
        variance: What they gathered; see `variance_step`.
        variance_min: Variance from which to be narrow.
        alpha: Chance of ever being wrong.
    """
    n = double(known)
    width = polynomial_stitching(variance, alpha / 2.0, variance_min, 1.0)
    return np.where(n > 0.0, width / np.where(n > 0.0, n, 1.0), np.inf)
