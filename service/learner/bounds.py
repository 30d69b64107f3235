"""Index formulas on plain numbers or arrays, apart from money and from any one method.

Everything is elementwise: the service asks with one number, a rehearsal with one array
over all its runs, and both get the same formula. Values are shares of a ceiling unless a
docstring says otherwise. `ln` below is the natural logarithm.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

Numbers = NDArray[np.float64]

NEWTON_STEPS = 12
SMALLEST_MEAN = 1e-200  # Below it the root is that of mean 0, and quotients overflow.


def ucbid_index(mean: ArrayLike, rounds: ArrayLike, known: ArrayLike, gamma: float) -> Numbers:
    """
    min{mean + sqrt(gamma ln t / (2N)), 1}, and 1 while nothing is known.

    Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, Algorithm 1
    (gamma = 3).

    Args:
        mean: Mean of the known values.
        rounds: Number t of the round to be bid in, from 1.
        known: Number N of known values.
        gamma: Weight of the bonus.
    """
    return np.minimum(_array(mean) + ucbid_bonus(rounds, known, gamma), 1.0)


def ucbid_bonus(rounds: ArrayLike, known: ArrayLike, gamma: float) -> Numbers:
    """sqrt(gamma ln t / (2N)), infinite while nothing is known; see `ucbid_index`."""
    some = np.maximum(_array(known), 1.0)
    bonus = np.sqrt(gamma * np.log(_array(rounds)) / (2.0 * some))
    return np.where(_array(known) > 0.0, bonus, np.inf)


def ucbid_regret_bound(rounds: ArrayLike, gap: ArrayLike | None = None) -> Numbers:
    """
    3 + min{12 ln T / gap, 2 sqrt(6 T ln T)}: what UCBid may lose in T rounds, gamma = 3.

    Weed, Perchet, Rigollet, COLT 2016, Theorem 1, for values in [0, 1].

    Args:
        rounds: Number T of rounds played.
        gap: Largest number with no competing bid in (v, v + gap); None when unknown.
    """
    played = _array(rounds)
    whatever_the_market = 2.0 * np.sqrt(6.0 * played * np.log(played))
    if gap is None:
        return 3.0 + whatever_the_market
    return 3.0 + np.minimum(12.0 * np.log(played) / _array(gap), whatever_the_market)


def kl_ucbid_index(mean: ArrayLike, rounds: ArrayLike, known: ArrayLike, gamma: float) -> Numbers:
    """
    The x >= mean with kl(mean, x) = gamma ln t / N, and 1 while nothing is known.

    Achddou, Cappé, Garivier, "Efficient Algorithms for Stochastic Repeated Second-price
    Auctions", ALT 2021 (klUCBid). Arguments as for `ucbid_index`.
    """
    p, t, n = _array(mean), _array(rounds), _array(known)
    if p.ndim == t.ndim == n.ndim == 0:
        level = gamma * float(np.log(t)) / max(float(n), 1.0)
        return _array(kl_upper_single(float(p), level) if n > 0.0 else 1.0)
    index = kl_upper(p, gamma * np.log(t) / np.maximum(n, 1.0))
    return np.where(n > 0.0, index, 1.0)


def kl(p: ArrayLike, q: ArrayLike) -> Numbers:
    """p ln(p/q) + (1-p) ln((1-p)/(1-q)), the Bernoulli divergence, in nats."""
    of_p, of_q = _array(p), _array(q)
    return _array(special.rel_entr(of_p, of_q) + special.rel_entr(1.0 - of_p, 1.0 - of_q))


def kl_upper(mean: ArrayLike, divergence: ArrayLike) -> Numbers:
    """
    The largest x in [mean, 1] with kl(mean, x) <= divergence, to 1e-12.

    Newton's steps on a convex function from a point right of its root fall towards the root
    and never pass it. They run on the distance x - mean, where no digits cancel. At mean 0
    the root is 1 - exp(-divergence).
    """
    p, d = np.broadcast_arrays(_array(mean), _array(divergence))
    inside = (p > SMALLEST_MEAN) & (p < 1.0)
    # Both sides of `where` are worked out, so the one not taken gets a harmless number.
    safe_p = np.where(inside, p, 0.5)
    root = p + _kl_distance(safe_p, np.maximum(d, 0.0))
    at_zero = -np.expm1(-np.maximum(d, 0.0))
    index = np.where(p >= 1.0, 1.0, np.where(p <= SMALLEST_MEAN, at_zero, root))
    return np.clip(index, p, 1.0)


def kl_upper_single(mean: float, divergence: float) -> float:
    """
    `kl_upper` of one number: the same steps without an array for each, to the last bit.

    Logarithms and exponentials stay those of numpy, which may differ from the C library's.
    """
    d = max(divergence, 0.0)
    if mean >= 1.0:
        root = 1.0
    elif mean <= SMALLEST_MEAN:
        root = -float(np.expm1(-d))
    else:
        root = mean + _kl_distance_single(mean, d)
    return min(max(root, mean), 1.0)


def _kl_distance_single(p: float, d: float) -> float:
    rest = 1.0 - p
    end = rest * (1.0 - 2.0**-52)
    near_one = -rest * float(np.expm1(-(d - p * float(np.log(p))) / rest))
    x = min(math.sqrt(d / 2.0), d + math.sqrt(d * d + 2.0 * p * d), near_one, end)
    for _ in range(NEWTON_STEPS):
        excess = -p * float(np.log1p(x / p)) - rest * float(np.log1p(-x / rest)) - d
        slope = max(x, 1e-300) / ((p + x) * (rest - x))
        before, x = x, min(max(x - excess / slope, 0.0), end)
        # From here on every step would be this one again.
        if x == before:
            break
    return x


def _kl_distance(p: Numbers, d: Numbers) -> Numbers:
    rest = 1.0 - p
    # Just short of 1, where the divergence is infinite.
    end = rest * (1.0 - 2.0**-52)
    x = np.minimum(_kl_distance_at_most(p, d), end)
    for _ in range(NEWTON_STEPS):
        excess = -p * np.log1p(x / p) - rest * np.log1p(-x / rest) - d
        slope = np.maximum(x, 1e-300) / ((p + x) * (rest - x))
        x = np.clip(x - excess / slope, 0.0, end)
    return _array(x)


def _kl_distance_at_most(p: Numbers, d: Numbers) -> Numbers:
    # Three ways never to start left of the root: kl >= 2 (x-p)^2 (Pinsker's inequality),
    # kl >= (x-p)^2 / (2x) for x >= p, close for small p, and kl >= p ln p +
    # (1-p) ln((1-p)/(1-x)), close where x is near 1.
    near_one = -(1.0 - p) * np.expm1(-(d - p * np.log(p)) / (1.0 - p))
    return np.minimum(np.minimum(np.sqrt(d / 2.0), d + np.sqrt(d * d + 2.0 * p * d)), near_one)


def gamma_quantile(shape: ArrayLike, rate: ArrayLike, order: ArrayLike) -> Numbers:
    """
    The quantile of a Gamma distribution with density proportional to x^(shape-1) e^(-rate x).

    Args:
        shape: Above 0.
        rate: Above 0; the quantile has the unit of 1 / rate.
        order: Between 0 and 1.
    """
    return _array(special.gammaincinv(_array(shape), _array(order)) / _array(rate))


def _array(numbers: object) -> Numbers:
    return np.asarray(numbers, dtype=np.float64)
