"""The likeliest rate of delays of one line item in plain numbers, apart from the same over many.

To call numpy for a handful of buckets costs ten times what it adds up. `delay.fit` answers by
comparing numbers only: which rate of a grid is the likeliest, then whether the slope there rises
or falls. Here the same is decided by fewer and plainer sums; whatever is too close to decide
apart from their rounding is left to `delay.fit`, so the rate is the same to the last bit.
"""

from __future__ import annotations

import math
from math import expm1
from typing import NamedTuple

import numpy as np

from service.learner.arrays import Numbers, double
from service.learner.delay import CLOSEST, FASTEST, NEWTON_STEPS, PROFILE_POINTS, SMALLEST

# How far apart two numbers must be, as a part of them, for another order of the same sums not
# to swap them; what those sums lose by rounding is a thousandth of it or less.
APART = 1e-9
ROUNDING = 1e-12  # Of a log-likelihood, as a part of the most its terms can come to.
LOGARITHM_MAX = 60.0  # Of a share, rate or chance in range none is larger.
NEAR_ONE = 1e-13  # Of what is left of a share, by rounding; the nearer to 1 the more it matters.
NEARLY = 3e-6  # So far a share may miss what it must explain, as a part of it.
SETTLED = 1e-6  # So small a step of Newton's is the last one that counts.
WHOLE_MAX = 2.0**52  # Sums of halves are exact up to here, in any order.

_UP = np.linspace(0.0, 1.0, PROFILE_POINTS)
_DOWN = 1.0 - _UP


class TooClose(ArithmeticError):
    """Two numbers lie within the rounding of either way to work them out."""


class Waiting(NamedTuple):
    """
    What is known of the impressions of one line item; see `delay.Seen`.

    Args:
        converted: Above 0.
        delay_sum: Sum of the delays of those.
        buckets: Age and number of each bucket that holds any; ages are whole or halves.
        oldest: Age of the oldest bucket, empty ones too.
    """

    converted: int
    delay_sum: int
    buckets: tuple[tuple[float, int], ...]
    oldest: float


def rate_of(waiting: Waiting, weight: float, mean: float, halvings: int) -> float | None:
    """
    The rate that `delay.fit` finds; None where it must be asked itself.

    Args:
        waiting: What is known.
        weight: Conversions that the prior of the rate is worth; above 0.
        mean: Mean delay of those.
        halvings: How often the span of the grid is halved.
    """
    try:
        return _Profile(waiting, weight, mean).top(halvings)
    except TooClose:
        return None


class _Profile:
    """
    The likelihood of rates, each with its best share, times the prior of the rate.

    The slower the rate, the larger its best share and so what is still to come of every bucket.
    `level`, where the slope would vanish with as much to come as at a rate, is one step of
    expectation and maximisation; between the two the slope keeps its sign.
    """

    def __init__(self, waiting: Waiting, weight: float, mean: float) -> None:
        self._buckets, self._oldest = waiting.buckets, waiting.oldest
        self._converted = float(waiting.converted)
        self._conversions = self._converted + weight
        self._waited = waiting.delay_sum + weight * mean
        self._counts = [count for _, count in waiting.buckets]
        self._whole = [(age, count, age * count) for age, count in waiting.buckets]
        self._silent = sum(self._counts)
        self._rising, self._falling = 0.0, math.inf

    def top(self, halvings: int) -> float:
        rates = self._grid()
        top = self._likeliest(rates)
        low = float(np.log(rates[max(top - 1, 0)]))
        high = float(np.log(rates[min(top + 1, PROFILE_POINTS - 1)]))
        for _ in range(halvings):
            middle = 0.5 * (low + high)
            if self._rises(math.exp(middle)):
                low = middle
            else:
                high = middle
        return float(np.exp(0.5 * (low + high)))

    def _grid(self) -> Numbers:
        # By numpy, whose logarithms and exponentials are not always those of the C library.
        ages = sum(waited for *_, waited in self._whole)
        if ages > WHOLE_MAX:
            raise TooClose
        conversions = max(self._conversions, 1.0)
        slowest = conversions / (self._waited + ages + self._oldest)
        fastest = conversions / max(self._waited, conversions * self._oldest / FASTEST)
        return double(np.exp(np.log(slowest) * _DOWN + np.log(fastest) * _UP))

    def _likeliest(self, rates: Numbers) -> int:
        heights = self._heights(rates)
        second, first = np.partition(heights, -2)[-2:].tolist()
        if first - second < ROUNDING * LOGARITHM_MAX * (2.0 * self._conversions + self._silent):
            raise TooClose
        return int(np.argmax(heights))

    def _heights(self, rates: Numbers) -> Numbers:
        """The log-likelihood of each rate; of all at once, since so many are worth an array."""
        ages, counts = double([age for age, _ in self._buckets]), double(self._counts)
        come = -np.expm1(-rates[:, np.newaxis] * ages)
        still, came = 1.0 - come, come * counts
        # As if all buckets were of one age, which is not far off and never beyond the root.
        mean = came.sum(axis=1) / max(self._silent, 1)
        over = np.maximum(mean * (1.0 + self._silent / self._converted) - 1.0, CLOSEST)
        for _ in range(NEWTON_STEPS):
            apart = 1.0 / (over[:, np.newaxis] + still)
            total = np.vecdot(came, apart)
            gap = total / self._converted - 1.0
            # The likelihood is off by no more than the square of this, times the conversions.
            if ((np.abs(gap) <= NEARLY) | ((gap < 0.0) & (over == CLOSEST))).all():
                break
            square = np.vecdot(came * apart, apart)
            over = np.maximum(over + total * gap / np.maximum(square, SMALLEST), CLOSEST)
        else:
            raise TooClose
        told = np.log(over[:, np.newaxis] + still) @ counts
        told -= (self._converted + self._silent) * np.log1p(over)
        return double(told + self._conversions * np.log(rates) - rates * self._waited)

    def _rises(self, rate: float) -> bool:
        if rate < self._rising * (1.0 - APART):
            return True
        if rate > self._falling * (1.0 + APART):
            return False
        level, apart = self._level(rate)
        if abs(level - rate) < rate * apart:
            raise TooClose
        if level > rate:
            self._rising = level
            return True
        self._falling = level
        return False

    def _level(self, rate: float) -> tuple[float, float]:
        """The level at a rate, and how far from it the rate must be to be surely beside it."""
        parts = []
        for age, count, waited in self._whole:
            kept = expm1(-rate * age)
            parts.append((-count * kept, 1.0 + kept, waited))
        (over, apart), later = self._over(parts), 0.0
        for _, left, waited in parts:
            later += waited * left / (over + left)
        return self._conversions / (self._waited + later), apart

    def _over(self, parts: list[tuple[float, float, float]]) -> tuple[float, float]:
        """1 / share - 1 of the best share: the steps of `delay`, until they stand still."""
        converted = self._converted
        over = self._silent / converted
        for _ in range(NEWTON_STEPS):
            total = square = 0.0
            for came, left, _ in parts:
                apart = over + left
                share = came / apart
                total += share
                square += share / apart
            before = over
            if square > 0.0:
                over -= total * (1.0 - total / converted) / square
            over = max(over, CLOSEST)
            if abs(over - before) <= SETTLED * over:
                # At its largest a share is the same in every order of sums, if it surely is.
                if over > CLOSEST or total > converted * (1.0 - APART):
                    return over, APART + NEAR_ONE / over
                share = 1.0 / (1.0 + over)
                return (1.0 - share) / share, APART
        raise TooClose
