"""Detectors of a change in the mean, one step at a time, apart from what is done on an alarm.

Elementwise: one line item, or all runs of a rehearsal. A detector is its state, a step and
a level; whoever keeps the state compares it with the level and starts again from 0.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from service.learner.arrays import Numbers, double, doubles

Whole = NDArray[np.int64]

UNITS_PER_NAT = 2**40
# Far above any level, and no batch of a million can carry it past 64 bits from there.
STATE_MAX = 2**60


def cusum_step(
    up: ArrayLike, down: ArrayLike, value: ArrayLike, target: ArrayLike, allowance: float
) -> tuple[Numbers, Numbers]:
    """
    max(0, up + x - target - k) and max(0, down - x + target - k), the two-sided CUSUM.

    Page, "Continuous inspection schemes", Biometrika 41(1/2):100-115, 1954. With values in
    standard deviations, k = 0.5 and level 4 or 5 are the usual design against a shift of 1.

    Args:
        up: State against a rise, 0 at first.
        down: State against a fall, 0 at first.
        value: The new value x.
        target: Mean while nothing has changed.
        allowance: Half the smallest shift that matters, k.
    """
    rise, fall, x, mean = doubles(up, down, value, target)
    grown = np.maximum(rise + (x - mean - allowance), 0.0)
    return grown, np.maximum(fall - (x - mean + allowance), 0.0)


def bernoulli_increments(before: float, after: float) -> tuple[int, int]:
    """
    What a success and a failure add to the log-likelihood CUSUM, in whole units.

    ln(after / before) and ln((1 - after) / (1 - before)), Page 1954. Whole numbers, so that a
    state is the same bytes on every machine and for every way of adding up.

    Args:
        before: Rate while nothing has changed, strictly between 0 and 1.
        after: Rate to be found, below or above it.
    """
    success = math.log(after / before)
    failure = math.log1p(-after) - math.log1p(-before)
    return in_units(success), in_units(failure)


def bernoulli_cusum_step(
    state: ArrayLike, trials: ArrayLike, successes: ArrayLike, increments: tuple[int, int]
) -> Whole:
    """
    max(0, state + successes s + failures f), the log-likelihood CUSUM for a batch at once.

    Within a batch the state is not held at 0, so it is never above what single steps give in
    any order, and a batch brings no false alarm that they would not bring. With batches of
    one it is Page's own, and Lorden, "Procedures for reacting to a change in distribution",
    Ann. Math. Statist. 42(6):1897-1908, 1971, has e^level trials or more from one false
    alarm to the next.

    Args:
        state: In units, 0 at first.
        trials: In this step, a million at most.
        successes: Of those.
        increments: From `bernoulli_increments`.
    """
    now, n, k = (np.asarray(x, dtype=np.int64) for x in (state, trials, successes))
    success, failure = increments
    moved = now + k * np.int64(success) + (n - k) * np.int64(failure)
    return np.asarray(np.clip(moved, 0, STATE_MAX), dtype=np.int64)


def in_units(nats: float) -> int:
    """A log-likelihood or a level in whole units of 2^-40."""
    return round(nats * UNITS_PER_NAT)


def in_nats(units: ArrayLike) -> Numbers:
    """A state in natural logarithms, for people."""
    return double(units) / UNITS_PER_NAT


def page_hinkley_step(
    count: ArrayLike,
    mean: ArrayLike,
    excess: ArrayLike,
    value: ArrayLike,
    tolerance: float,
    fading: float = 1.0,
) -> tuple[Numbers, Numbers, Numbers]:
    """
    Count, mean and max(0, fading excess + x - mean - tolerance) after one more value.

    Page's test against a mean learnt on the way, which holds the new value already; Hinkley,
    "Inference about the change-point from cumulative sum tests", Biometrika 58(3):509-523,
    1971. The fading is later practice. It sees a rise; give it negated values for a fall.

    Args:
        count: Values so far, 0 at first.
        mean: Their mean, 0 at first.
        excess: State, 0 at first.
        value: The new value x.
        tolerance: Part of each excess that is let pass.
        fading: Factor on the old state, 1 for none.
    """
    n, average, state, x = doubles(count, mean, excess, value)
    average = average + (x - average) / (n + 1.0)
    return n + 1.0, average, np.maximum(fading * state + (x - average - tolerance), 0.0)


def cusum_ucb_parameters(rounds: ArrayLike, changes: ArrayLike) -> tuple[Numbers, Numbers]:
    """
    Level ln(T / c) and exploration sqrt((c / T) ln(T / c)) for T rounds and c changes.

    Liu, Lee, Shroff, "A change-detection based framework for piecewise-stationary multi-armed
    bandit problem", AAAI 2018 (CUSUM-UCB). Without exploration a bidder that has stopped
    winning never sees a change.
    """
    t, c = doubles(rounds, changes)
    level = np.log(t / c)
    return level, np.sqrt(level * c / t)
