"""How much old values count when the market drifts, apart from the index they are put into.

Formulas of Garivier, Moulines, "On Upper-Confidence Bound Policies for Switching Bandit
Problems", ALT 2011; their theorems are about arms, and putting these sums into a bid rule is
plain substitution. A line item that seldom wins has a discounted number of values below 1
between wins; the indices take such a fraction.
"""

from __future__ import annotations

from typing import Literal, assert_never

import numpy as np
from numpy.typing import ArrayLike

from service.learner.arrays import Numbers, double, doubles

Kind = Literal["half_life", "effective", "window"]


def discounted_step(
    known: ArrayLike, amount: ArrayLike, played: ArrayLike, reward: ArrayLike, gamma: ArrayLike
) -> tuple[Numbers, Numbers]:
    """
    gamma N + 1 and gamma X + reward where played, gamma N and gamma X where not.

    Args:
        known: Discounted number N of values.
        amount: Discounted sum X of values.
        played: 1 where this round gave a value, 0 where not.
        reward: That value.
        gamma: Factor per round.
    """
    n, x, one, r, factor = doubles(known, amount, played, reward, gamma)
    return factor * n + one, factor * x + one * r


def discounted_padding(
    known: ArrayLike, total: ArrayLike, xi: float = 0.6, scale: float = 1.0
) -> Numbers:
    """
    2 scale sqrt(xi ln n / N); infinite while nothing is known.

    Args:
        known: Discounted number N of values of this arm.
        total: Discounted number n of values of all arms, or of rounds.
        xi: Weight, above 1/2 in the theorem.
        scale: Largest value.
    """
    n, rounds = doubles(known, total)
    return _padding(n, np.log(np.maximum(rounds, 1.0)), xi, 2.0 * scale)


def window_padding(
    rounds: ArrayLike, window: ArrayLike, known: ArrayLike, xi: float = 0.6, scale: float = 1.0
) -> Numbers:
    """
    scale sqrt(xi ln min(t, window) / N); infinite while nothing is known in the window.

    Args:
        rounds: Number t of the round, from 1.
        window: Length of the window in rounds, not in values.
        known: Number N of values in the window.
        xi: Weight, above 1/2 in the theorem.
        scale: Largest value.
    """
    t, length, n = doubles(rounds, window, known)
    return _padding(n, np.log(np.maximum(np.minimum(t, length), 1.0)), xi, scale)


def _padding(known: Numbers, log_rounds: Numbers, xi: float, scale: float) -> Numbers:
    padding = scale * np.sqrt(xi * log_rounds / np.where(known > 0.0, known, 1.0))
    return np.where(known > 0.0, padding, np.inf)


def discount_factor(rounds: ArrayLike, changes: ArrayLike, scale: float = 1.0) -> Numbers:
    """1 - sqrt(changes / rounds) / (4 scale), the gamma of Garivier, Moulines (from memory)."""
    t, c = doubles(rounds, changes)
    return 1.0 - np.sqrt(c / t) / (4.0 * scale)


def window_length(rounds: ArrayLike, changes: ArrayLike, scale: float = 1.0) -> Numbers:
    """2 scale sqrt(T ln T / changes), the tau of Garivier, Moulines (from memory)."""
    t, c = doubles(rounds, changes)
    length = 2.0 * scale * np.sqrt(t * np.log(t) / np.where(c > 0.0, c, 1.0))
    return np.where(c > 0.0, length, np.inf)


def effective_size(gamma: ArrayLike) -> Numbers:
    """1 / (1 - gamma): the sum of all discount weights, infinite when nothing is forgotten."""
    kept = double(gamma)
    return np.where(kept < 1.0, 1.0 / np.where(kept < 1.0, 1.0 - kept, 1.0), np.inf)


def weights(ages: ArrayLike, size: float, kind: Kind) -> Numbers:
    """
    The weight of each bucket of a ring, 1 for the newest and falling with age.

    Args:
        ages: Age of each bucket, from 0; in the unit of `size`: rounds, hours or buckets.
        size: The half-life (weight 2^(-age / size)); the effective size, 1 or more (weight
            gamma^age with gamma = 1 - 1 / size, so that the weights of ages 0, 1, 2 ... sum
            to `size`); or the window (weight 1 below that age, 0 from it on).
        kind: Which of these.
    """
    age = double(ages)
    if kind == "half_life":
        return double(np.exp2(-age / size))
    if kind == "effective":
        return double((1.0 - 1.0 / size) ** age)
    if kind == "window":
        return np.where(age < size, 1.0, 0.0)
    assert_never(kind)
