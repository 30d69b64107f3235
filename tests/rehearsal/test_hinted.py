"""A buyer with a model: bidding calibrated hints against bidding one learnt value."""

from __future__ import annotations

import pytest

from service.rehearsal import pacing_figures
from service.rehearsal.market import LognormalBids, UniformBids

MEAN = 10**6


@pytest.mark.parametrize("share", [0.05, 0.1, 0.2])
def test_hints_earn_twice_at_like_spend(share: float) -> None:
    """Mean values of spread 1, prices around the mean, hints three times too high."""
    figures = pacing_figures.by_hints(LognormalBids(MEAN, 0.5), share, seed=0)

    assert figures.times >= 2.0
    assert figures.spent_one == pytest.approx(figures.spent_hints, abs=0.05)
    assert figures.ratio == pytest.approx(1 / 3, rel=0.2)


def test_where_much_is_cheap_hints_earn_less_than_twice() -> None:
    """With prices from nothing up even one value buys well: half as much again, not twice."""
    figures = pacing_figures.by_hints(UniformBids(0, 2 * MEAN), 0.1, seed=0)
    assert 1.5 < figures.times < 2.0
