"""Product-limit curves from exact and one-sided counts, apart from where the counts come from.

Counts stand at ascending places and may be fractions. The highest competing bid m must be
independent of our bids, given what the counts were split by.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from service.learner.arrays import Numbers, double, doubles


class Product(NamedTuple):
    """
    A product-limit estimate at each place.

    Args:
        share: S, the estimated chance to be above the place (reversed: at or below it).
        at_risk: Counts that could still have shown something there.
        spread: Greenwood's sum of d / (n (n - d)); the variance of S is S^2 times it. Infinite
            once nothing is left.
    """

    share: Numbers
    at_risk: Numbers
    spread: Numbers


def kaplan_meier(seen: ArrayLike, above: ArrayLike) -> Product:
    """
    S(t) = product over places up to t of 1 - d / n, for right-censored counts.

    Kaplan, Meier, "Nonparametric estimation from incomplete observations", Journal of the
    American Statistical Association 53:457-481, 1958. What is seen at a place comes before
    what is censored there.

    Args:
        seen: Number d of values seen at each place.
        above: Number known to be above that place and no more.
    """
    d, c = doubles(seen, above)
    # At risk at a place is all that was seen or censored there or further up.
    return _product(d, np.cumsum((d + c)[::-1])[::-1])


def reverse_kaplan_meier(seen: ArrayLike, below: ArrayLike) -> Product:
    """
    F just below u = product over places from u on of 1 - d / n, for left-censored counts.

    The same estimate with time run backwards. The share at a place is the chance to be at or
    below it, `at_risk` the number at or below the next place.

    Args:
        seen: Number d of values seen at each place.
        below: Number known to be at or below that place and no more.
    """
    d, c = doubles(seen, below)
    back = _product(d[::-1], np.cumsum(d + c)[::-1])
    shifted = (np.append(first, one[:-1]) for first, one in zip((1.0, 0.0, 0.0), back, strict=True))
    return Product(*(double(one[::-1]) for one in shifted))


def _product(d: Numbers, n: Numbers) -> Product:
    some = n > 0.0
    rest = np.where(some, 1.0 - d / np.where(some, n, 1.0), 1.0)
    left = n - d
    full = np.where(d > 0.0, np.inf, 0.0)
    terms = np.where(left > 0.0, d / np.where(left > 0.0, n * left, 1.0), full)
    return Product(double(np.cumprod(rest)), double(n), double(np.cumsum(terms)))


def greenwood_error(product: Product) -> Numbers:
    """S sqrt(sum of d / (n (n - d))), Greenwood's standard error; 0 once S is 0."""
    finite = np.isfinite(product.spread)
    return double(product.share * np.sqrt(np.where(finite, product.spread, 0.0)))


def plain_interval(product: Product, level: float) -> tuple[Numbers, Numbers]:
    """S -/+ z times Greenwood's error, cut to [0, 1]; poor near both ends."""
    reach = _z(level) * greenwood_error(product)
    return np.maximum(product.share - reach, 0.0), np.minimum(product.share + reach, 1.0)


def log_log_interval(product: Product, level: float) -> tuple[Numbers, Numbers]:
    """
    exp(-exp(ln(-ln S) +/- z sqrt(sum) / |ln S|)), which stays in [0, 1].

    Where S is 1 the formula says nothing: the lower end is then that of Clopper, Pearson,
    Biometrika 26:404-413, 1934, for no event among those at risk. Where S is 0 the ends are 0
    and those of the place before.
    """
    s = product.share
    inside = (s > 0.0) & (s < 1.0)
    log = np.log(np.where(inside, s, 0.5))
    spread = np.where(np.isfinite(product.spread), product.spread, 0.0)
    reach = _z(level) * np.sqrt(spread) / np.abs(log)
    low, high = np.exp(log * np.exp(reach)), np.exp(log * np.exp(-reach))
    none_yet = ((1.0 - level) / 2.0) ** (1.0 / np.maximum(product.at_risk, 1e-9))
    low = np.where(inside, low, np.where(s >= 1.0, none_yet, 0.0))
    high = np.where(inside, high, np.where(s >= 1.0, 1.0, np.inf))
    return double(np.minimum(low, s)), _carried(high)


def _carried(high: Numbers) -> Numbers:
    # An end that is not known is that of the nearest place before it.
    known = np.where(np.isfinite(high), np.arange(high.size), -1)
    nearest = np.maximum.accumulate(known)
    return np.where(nearest >= 0, high[np.maximum(nearest, 0)], 1.0)


def _z(level: float) -> float:
    return float(special.ndtri(0.5 + level / 2.0))
