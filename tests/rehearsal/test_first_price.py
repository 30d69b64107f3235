"""Replays of first-price auctions count money right, and curves are compared where they speak."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner.curve_counts import Feed, Outcome
from service.learner.partition import Ticks
from service.rehearsal import censoring, first_price
from service.rehearsal.first_price import Result
from service.rehearsal.telling import outcomes

TICKS = Ticks(1_000_000, 10_000)


def test_what_bids_would_have_brought() -> None:
    """A bid that equals the competing one wins and pays itself."""
    competing, values, bids = (np.array(one) for one in ([5, 5, 5], [9, 9, 9], [4, 5, 7]))
    assert first_price.earned(competing, values, bids) == Result(surplus=6, wins=2, paid=12)


def test_the_best_fixed_share_by_hand() -> None:
    """Half the value wins all there is to win."""
    competing, values = np.array([500, 200, 9_000]), np.array([1_000, 400, 600])
    share, result = first_price.best_fixed_share(competing, values)
    assert (share, result) == (0.5, Result(surplus=700, wins=2, paid=700))


@pytest.mark.parametrize("feed", ["always", "on_win", "on_loss", "never"])
@pytest.mark.parametrize("scale", ["price", "share"])
def test_a_still_market_is_learnt(feed: Feed, scale: first_price.Scale) -> None:
    """Competing bids at 300,000 for a value of 800,000: nearly all the surplus is earned."""
    competing, values = np.full(4_000, 300_000), np.full(4_000, 800_000)
    result = first_price.replay(competing, values, feed, scale, TICKS)
    assert 0.85 * 4_000 * 500_000 <= result.surplus <= 4_000 * 500_000


def test_a_feed_tells_its_own_side() -> None:
    """One won and one lost auction under each."""
    bids, least = np.array([7, 7]), np.array([6, 8])
    told = {feed: outcomes(bids, least, feed) for feed in ("always", "on_win", "on_loss", "never")}
    assert told == {
        "always": [Outcome(7, True, 6, "always"), Outcome(7, False, 8, "always")],
        "on_win": [Outcome(7, True, 6, "on_win"), Outcome(7, False, None, "on_win")],
        "on_loss": [Outcome(7, True, None, "on_loss"), Outcome(7, False, 8, "on_loss")],
        "never": [Outcome(7, True, None, "never"), Outcome(7, False, None, "never")],
    }


def test_a_curve_is_compared_only_where_it_speaks() -> None:
    """Bids of 200,000 see a fifth of the prices; there the estimate is the truth."""
    competing = np.arange(1, 101) * 10_000
    truth = censoring.full(competing, TICKS)
    found = censoring.distance(competing, np.full(100, 200_000), ("on_win",), truth)
    assert found.largest == pytest.approx(0.0, abs=1e-12)
    assert found.identified == pytest.approx(21 / 101)
    assert found.covered == 1.0


def test_foreign_bids_are_ours_in_another_order() -> None:
    """On ticks, at least one tick, at most the top."""
    values = np.array([1, 25_000, 330_000, 5_000_000])
    own = censoring.own_bids(values, TICKS)
    assert own.tolist() == [10_000, 20_000, 330_000, 1_000_000]
    foreign = censoring.foreign_bids(values, TICKS, np.random.default_rng(1))
    assert sorted(foreign.tolist()) == own.tolist()
