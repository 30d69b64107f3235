"""Turnbull's estimate against worked examples, another program, and a general optimiser.

lifelines 0.30.3 `fit_interval_censoring` was run once and what it gave stands here. It reads
intervals as closed, so (low, high] was given to it as [low + 1, high].
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize

from service.learner.arrays import Numbers, double
from service.learner.turnbull import Masses, turnbull

EXAMPLES = [
    ([0, 1, 0], [1, 2, 2], [2, 1, 1], [2 / 3, 1 / 3]),
    ([0, 0, 1, 2], [1, 2, 3, 3], [1, 1, 1, 1], [1 / 2, 0, 1 / 2]),
    ([0, 0, 1, 2], [1, 2, 3, 3], [1, 2, 1, 1], [1 / 2, 1 / 6, 1 / 3]),
]
LOW = [
    *(3, 1, 4, 2, 5, 2, 4, 2, 1, 0, 3, 5, 3, 7, 6, 5, 2, 3, 6, 0, 2, 4, 2, 1, 7, 6, 6, 1, 4, 2),
    *(6, 7, 6, 3, 6, 1, 4, 1, 5, 0),
]
HIGH = [
    *(4, 6, 6, 6, 8, 3, 5, 5, 3, 3, 4, 9, 5, 11, 8, 10, 4, 5, 11, 1, 3, 8, 5, 3, 11, 8, 10, 4),
    *(6, 4, 11, 12, 10, 5, 10, 5, 5, 5, 7, 5),
]
# lifelines: the chance of place 2 and more, 3 and more, and so on to 8.
LIFELINES = [0.971121, 0.971121, 0.736532, 0.579732, 0.365773, 0.365773, 0.274330]


def _cells(masses: Masses, size: int) -> Numbers:
    # The examples have innermost intervals of one cell; a dropped cell has no chance.
    assert (masses.high - masses.low == 1).all()
    return double(np.bincount(masses.high - 1, masses.mass, size))


@pytest.mark.parametrize(("low", "high", "weight", "mass"), EXAMPLES)
def test_worked_examples(
    low: list[int], high: list[int], weight: list[float], mass: list[float]
) -> None:
    """Three small sets solved by hand; in the second a mass vanishes, where plain passes crawl."""
    masses = turnbull(low, high, weight)
    assert _cells(masses, len(mass)) == pytest.approx(mass, abs=1e-7)
    assert masses.gap <= 1e-8
    assert masses.passes <= 2000


def test_touching_intervals_do_not_share_a_point() -> None:
    """(0,1] and (1,2] are apart; read as closed, all the chance would fall on 1."""
    assert turnbull([0, 0, 1, 0], [1, 1, 2, 2], np.ones(4)).mass == pytest.approx([2 / 3, 1 / 3])


def test_forty_intervals_as_lifelines_has_them() -> None:
    """To what its own stopping rule leaves, three digits."""
    masses = turnbull(LOW, HIGH, np.ones(40))
    at_least = [1.0 - masses.mass[masses.high < place].sum() for place in range(2, 9)]
    assert at_least == pytest.approx(LIFELINES, abs=2e-3)


@pytest.mark.parametrize("seed", range(6))
def test_no_other_distribution_is_more_likely(seed: int) -> None:
    """A general optimiser over all cells finds no higher likelihood."""
    rng = np.random.default_rng(seed)
    low = rng.integers(0, 8, 40)
    high = low + rng.integers(1, 5, 40)
    inside = (np.arange(1, 13) > low[:, None]) & (np.arange(1, 13) <= high[:, None])
    masses = turnbull(low, high, np.ones(40))
    ours = np.bincount(masses.high - 1, masses.mass, 12)

    def less_likely(logits: Numbers) -> float:
        chance = np.exp(logits - logits.max())
        return -float(np.log(inside @ (chance / chance.sum())).mean())

    theirs = optimize.minimize(less_likely, np.zeros(12), method="BFGS").fun
    assert -float(np.log(inside @ ours).mean()) <= theirs + 1e-9
    assert masses.mass.sum() == pytest.approx(1.0)


def test_weights_are_repetitions() -> None:
    """An interval told three times weighs three."""
    once = turnbull([0, 0, 1, 0], [1, 1, 2, 2], np.ones(4))
    assert turnbull([0, 1, 0], [1, 2, 2], [2, 1, 1]).mass == pytest.approx(once.mass)


def test_a_wide_innermost_interval_is_named_and_not_filled() -> None:
    """Where inside (2, 7] its chance lies the data do not say."""
    masses = turnbull([0, 2], [7, 9], [1, 1])
    assert (masses.low.tolist(), masses.high.tolist()) == ([2], [7])
