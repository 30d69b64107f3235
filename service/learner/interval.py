"""The interval shown for the mean value of a win, apart from every bid formula: no bid uses it.

Lower limit: Clopper, Pearson, "The use of confidence or fiducial limits illustrated in the
case of the binomial", Biometrika 26(4):404-413, 1934, exact when all values above nothing
are alike. Unlike values are turned into equal ones with the same sum and sum of squares,
and the upper limit adds one more value, as Fay and Feuer do for Poisson counts in "Confidence
intervals for directly standardized rates: a method based on the gamma distribution",
Statistics in Medicine 16(7):791-801, 1997. Where nearly every win has a value of its own
size, the upper limit of Student's t is the larger one and is taken. The combination is our
own; its cover is held by simulation in the tests.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from service.learner.bounds import Numbers

CONFIDENCE = 0.95
IN_WORDS = (
    "95 % interval for the mean value of an impression won, at one moment fixed beforehand, not "
    "at any time: assumes that values of different wins do not depend on each other, come from "
    "one unchanging distribution, and hide no rare amount far above those seen or `typical`; with "
    "few and very unequal amounts it covers nearer 90 %"
)


def mean_interval(
    known: ArrayLike,
    amount: ArrayLike,
    amount_square: ArrayLike,
    typical: float,
    ceiling: float,
) -> tuple[Numbers, Numbers]:
    """
    Limits for the mean value, in the unit of the amounts; 0 to the ceiling while none is known.

    Args:
        known: Number of wins whose value is known.
        amount: Sum of their values.
        amount_square: Sum of the squares of their values.
        typical: Usual value of one; stands for the size of values not seen yet.
        ceiling: Largest value of one.
    """
    n, total, square = (np.asarray(x, dtype=np.float64) for x in (known, amount, amount_square))
    size = np.where(total > 0.0, square / np.where(total > 0.0, total, 1.0), 0.0)
    unseen = np.maximum(size, typical)
    low = size * _limit(total, square, n, tail=0.5 - CONFIDENCE / 2.0)
    high_total, high_square = total + unseen, square + unseen * unseen
    by_count = (
        high_square / high_total * _limit(high_total, high_square, n, tail=0.5 + CONFIDENCE / 2.0)
    )
    high = np.minimum(np.maximum(by_count, _student_upper(n, total, square)), ceiling)
    return np.where(n > 0.0, np.minimum(low, high), 0.0), np.where(n > 0.0, high, ceiling)


def _limit(total: Numbers, square: Numbers, known: Numbers, tail: float) -> Numbers:
    # Equal values of the same sum and sum of squares number total^2 / square.
    equals = np.where(square > 0.0, total * total / np.where(square > 0.0, square, 1.0), 0.0)
    others = known - equals + 1.0
    quantile = special.betaincinv(
        np.maximum(equals, 1e-9), np.maximum(others, 1e-9), np.full_like(equals, tail)
    )
    edge = np.where(equals <= 0.0, 0.0, np.where(others <= 1e-9, 1.0, quantile))
    return np.asarray(edge, dtype=np.float64)


def _student_upper(known: Numbers, total: Numbers, square: Numbers) -> Numbers:
    n = np.maximum(known, 2.0)
    mean = total / n
    variance = np.maximum(square / n - mean * mean, 0.0) * n / (n - 1.0)
    margin = special.stdtrit(n - 1.0, 0.5 + CONFIDENCE / 2.0) * np.sqrt(variance / n)
    alone = np.where(total > 0.0, np.inf, 0.0)  # One value says nothing of how values differ.
    return np.where(known >= 2.0, mean + margin, alone)
