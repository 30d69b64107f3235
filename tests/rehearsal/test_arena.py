"""Bidders that learn against each other settle where theory says bidders with foresight do.

Equilibrium of n bidders with uniform values: bids of v (n - 1) / n in first price, and a mean
revenue of (n - 1) / (n + 1) in either format (Krishna, "Auction Theory").
"""

from __future__ import annotations

import numpy as np
import pytest

from service.learner.curve_counts import KEPT_WHOLE, Feed
from service.rehearsal.arena import VALUE_TOP, Arena, Play, settled

SEED = 1


@pytest.mark.parametrize("bidders", [2, 3])
@pytest.mark.parametrize("feed", ["always", "on_loss", "on_win"])
def test_first_price_learners_settle(bidders: int, feed: Feed) -> None:
    """40,000 auctions: bids within 10 % in all and in the upper quarters, revenue within 5 %."""
    play = Arena(bidders, feed=feed).play(np.random.default_rng(SEED), 40_000)
    ratio, quarters, revenue = settled(play, bidders)
    assert ratio == pytest.approx(1.0, abs=0.1)
    # Values of the lowest quarter hardly ever win, so it costs nothing to bid them too low.
    assert quarters[1:] == pytest.approx(np.ones(3), abs=0.1)
    assert revenue == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize("bidders", [2, 3])
def test_win_and_loss_alone_settle_too(bidders: int) -> None:
    """They take 300,000 auctions, as every bid must be tried."""
    arena = Arena(bidders, feed="never", kept=KEPT_WHOLE * 999 // 1000)
    ratio, quarters, revenue = settled(arena.play(np.random.default_rng(SEED), 300_000), bidders)
    assert ratio == pytest.approx(1.0, abs=0.1)
    assert quarters[1:] == pytest.approx(np.ones(3), abs=0.1)
    assert revenue == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize("bidders", [2, 3])
def test_second_price_brings_the_same_revenue(bidders: int) -> None:
    """Bidders that bid their value: within 2 % of (n - 1) / (n + 1)."""
    play = Arena(bidders, format="second").play(np.random.default_rng(SEED), 40_000)
    assert settled(play, bidders)[2] == pytest.approx(1.0, abs=0.02)


def test_one_wins_and_pays_by_the_format() -> None:
    """The highest bid pays itself in first price, the next one in second price; ties once."""
    for form in ("first", "second"):
        play = Arena(3, format=form).play(np.random.default_rng(2), 2_000)
        ordered = np.sort(play.bids, axis=1)
        due = ordered[:, -1] if form == "first" else ordered[:, -2]
        assert (play.paid.sum(axis=1) == due).all()
        assert ((play.paid > 0).sum(axis=1) <= 1).all()
        assert (play.bids <= play.values).all()


def test_the_measure_is_one_in_equilibrium() -> None:
    """Bids of v / 2 by two: every ratio is 1 and the revenue 1/3 to a per cent."""
    values = np.random.default_rng(3).integers(0, VALUE_TOP, (60_000, 2))
    bids = values // 2
    paid = np.where(bids == bids.max(axis=1, keepdims=True), bids, 0)
    ratio, quarters, revenue = settled(Play(values, bids, paid), 2)
    assert (ratio, *quarters) == pytest.approx([1.0] * 5, abs=1e-4)
    assert revenue == pytest.approx(1.0, abs=0.01)


def test_the_same_seed_plays_the_same() -> None:
    """And another plays otherwise."""
    plays = [Arena(2).play(np.random.default_rng(seed), 1_000).bids for seed in (1, 1, 2)]
    assert (plays[0] == plays[1]).all()
    assert not (plays[0] == plays[2]).all()
