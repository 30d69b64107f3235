"""Off-policy estimators, for bids whose chance was kept; apart from what needs no chance.

Horvitz, Thompson, "A generalization of sampling without replacement from a finite universe",
Journal of the American Statistical Association 47:663-685, 1952 (IPS); Swaminathan, Joachims,
"The self-normalized estimator for counterfactual learning", NIPS 2015 (SNIPS); Dudik, Langford,
Li, "Doubly robust policy evaluation and learning", ICML 2011 (DR); Kish, "Survey Sampling",
1965, for the effective sample size. Citations from memory.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from service.learner.arrays import Numbers, doubles

EFFECTIVE_MIN = 30.0
NORMAL_QUANTILE = 1.959963984540054  # Of order 0.975.


class Estimate(NamedTuple):
    """A mean reward and its standard error, in the unit of the rewards."""

    mean: float
    error: float

    @property
    def limits(self) -> tuple[float, float]:
        """A 95 % interval by the normal approximation."""
        reach = NORMAL_QUANTILE * self.error
        return self.mean - reach, self.mean + reach


def effective(weights: ArrayLike) -> float:
    """Kish's (sum w)^2 / sum w^2: as many alike weights would tell as much; 0 of none."""
    (w,) = doubles(weights)
    square = float(w @ w)
    return float(w.sum()) ** 2 / square if square > 0.0 else 0.0


def ips(weights: ArrayLike, rewards: ArrayLike, most: float = math.inf) -> Estimate:
    """
    mean(w r); unbiased where weights are right and nothing clips them.

    Args:
        weights: Chance of what was done under the alternative over that under which it was done.
        rewards: What came of it.
        most: Larger weights are cut here, which lowers the estimate of rewards above 0.
    """
    w, r = doubles(weights, rewards)
    return _mean(np.minimum(w, most) * r)


def snips(weights: ArrayLike, rewards: ArrayLike) -> Estimate:
    """sum(w r) / sum(w), which a shift of all rewards moves by itself alone; slightly biased."""
    w, r = doubles(weights, rewards)
    total = float(w.sum())
    # No row was likely under the alternative: there is nothing to take a mean of.
    if total <= 0.0:
        return Estimate(math.nan, math.nan)
    mean = float(w @ r) / total
    # By the delta method, the usual one for a ratio of means.
    return Estimate(mean, math.sqrt(float((w * w) @ ((r - mean) ** 2))) / total)


def doubly_robust(
    weights: ArrayLike, rewards: ArrayLike, model_done: ArrayLike, model_other: ArrayLike
) -> Estimate:
    """
    mean(q(x, other) + w (r - q(x, done))): right where either the weights or the model are.

    Args:
        weights: As for `ips`.
        rewards: What came of it.
        model_done: A model's guess of the reward of what was done.
        model_other: Its guess of the reward of the alternative.
    """
    w, r, done, other = doubles(weights, rewards, model_done, model_other)
    return _mean(other + w * (r - done))


def folded_means(rewards: ArrayLike, cells: ArrayLike, other: ArrayLike) -> tuple[Numbers, Numbers]:
    """
    The plainest model, the mean reward of a cell, learnt for each half from the other half.

    So that no row is its own witness. A cell that the other half has not seen is guessed 0.

    Args:
        rewards: One for each row.
        cells: A whole number for each row: which cell what was done lies in.
        other: Which cell the alternative would lie in.
    """
    (r,) = doubles(rewards)
    done, wish = np.asarray(cells, np.int64), np.asarray(other, np.int64)
    # Every other row, so that both halves see all times of the log.
    half = np.arange(r.size) % 2
    size = int(max(done.max(initial=0), wish.max(initial=0))) + 1
    guess = np.zeros((2, size))
    for side in (0, 1):
        rest = half != side
        count = np.bincount(done[rest], minlength=size)
        guess[side] = np.bincount(done[rest], r[rest], size) / np.maximum(count, 1)
    return guess[half, done], guess[half, wish]


def _mean(terms: Numbers) -> Estimate:
    # One row tells nothing of its own error, and an interval without end says so.
    if terms.size < 2:
        return Estimate(float(terms.mean()) if terms.size else math.nan, math.inf)
    return Estimate(float(terms.mean()), float(terms.std(ddof=1)) / math.sqrt(terms.size))
