"""The most likely distribution from intervals of any kind, for feeds that mix what they tell."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from service.learner.arrays import Numbers, double

Places = NDArray[np.intp]

TOLERANCE = 1e-8
PASSES_MAX = 20_000
PASSES_BETWEEN_PRUNINGS = 50
SMALL = 1e-2  # A mass below this share of its even part is tried at nought.


@dataclass(frozen=True, slots=True)
class Masses:
    """
    Chances of the innermost intervals (low, high]; where in one its chance lies nobody knows.

    Args:
        low: Lower ends, excluded, ascending.
        high: Upper ends, included.
        mass: The chance of each; they sum to 1.
        gap: By how much the best direction still raises the mean log-likelihood, at most.
        passes: How many passes it took.
    """

    low: Places
    high: Places
    mass: Numbers
    gap: float
    passes: int


def turnbull(
    low: ArrayLike, high: ArrayLike, weight: ArrayLike, tolerance: float = TOLERANCE
) -> Masses:
    """
    Maximise the likelihood of intervals (low, high] at whole places.

    Turnbull, "The empirical distribution function with arbitrarily grouped, censored and
    truncated data", Journal of the Royal Statistical Society B 38:290-295, 1976. Each pass is
    p_j <- p_j g_j, g_j = mean over intervals of [j inside] / chance of the interval. The
    likelihood is concave, so max g_j <= 1 + tolerance bounds what is missing from its maximum,
    however short the steps are. A mass on its way to nought takes for ever; so the small ones
    are dropped at times, which is kept only when that condition holds without them.

    Args:
        low: Lower ends, excluded.
        high: Upper ends, included, above the lower ones.
        weight: How often each interval was told; may be fractions.
        tolerance: When to stop.
    """
    ends = _innermost(np.asarray(low, dtype=np.intp), np.asarray(high, dtype=np.intp))
    first = np.searchsorted(ends[0], np.asarray(low, dtype=np.intp), side="left")
    last = np.searchsorted(ends[1], np.asarray(high, dtype=np.intp), side="right")
    share = double(weight) / double(weight).sum()
    mass, gap, passes = _climb(_Intervals(first, last, share, ends[0].size), tolerance)
    return Masses(ends[0], ends[1], mass, gap, passes)


def _innermost(low: Places, high: Places) -> tuple[Places, Places]:
    # A lower end that is followed by an upper one, with no other end between.
    lows, highs = np.unique(low), np.unique(high)
    start = lows[np.searchsorted(lows, highs, side="left") - 1]
    before = np.append(-2, highs[:-1])
    innermost = before <= start
    return start[innermost], highs[innermost]


@dataclass(frozen=True, slots=True)
class _Intervals:
    """Which innermost intervals each told interval covers: those from `first` to below `last`."""

    first: Places
    last: Places
    share: Numbers
    size: int

    def slopes(self, mass: Numbers) -> Numbers:
        """The g of each innermost interval."""
        sums = np.append(0.0, np.cumsum(mass))
        chance = np.maximum(sums[self.last] - sums[self.first], 1e-300)
        pull = self.share / chance
        # As differences, begun at the first place and ended after the last, then added up.
        steps = np.bincount(self.first, pull, self.size + 1)
        steps -= np.bincount(self.last, pull, self.size + 1)
        return double(np.cumsum(steps)[:-1])


def _climb(intervals: _Intervals, tolerance: float) -> tuple[Numbers, float, int]:
    mass = np.full(intervals.size, 1.0 / intervals.size)
    passes, gap = 0, _gap(intervals, mass)
    while gap > tolerance and passes < PASSES_MAX:
        mass = _passed(intervals, mass, PASSES_BETWEEN_PRUNINGS)
        pruned = _passed(intervals, _pruned(mass), PASSES_BETWEEN_PRUNINGS)
        passes += 2 * PASSES_BETWEEN_PRUNINGS
        gap = _gap(intervals, mass)
        # A mass of nought never grows again, so it is taken only where nothing is missing.
        if _gap(intervals, pruned) <= tolerance:
            mass, gap = pruned, _gap(intervals, pruned)
    return mass, gap, passes


def _gap(intervals: _Intervals, mass: Numbers) -> float:
    return float(intervals.slopes(mass).max()) - 1.0


def _passed(intervals: _Intervals, mass: Numbers, passes: int) -> Numbers:
    for _ in range(passes):
        mass = mass * intervals.slopes(mass)
    return double(mass / mass.sum())


def _pruned(mass: Numbers) -> Numbers:
    kept = np.where(mass < SMALL / mass.size, 0.0, mass)
    return double(kept / kept.sum())
