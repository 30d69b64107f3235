"""The win curve takes the right estimator, stays true for every feed, and stops where data stop."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner import curve_counts
from service.learner.arrays import Numbers
from service.learner.curve import Curve, curve
from service.learner.curve_counts import Counts, Feed, Outcome
from service.learner.partition import Ticks

TICKS = Ticks(100, 10)
FEEDS: list[tuple[Feed, str]] = [
    ("always", "empirical"),
    ("on_win", "kaplan-meier"),
    ("on_loss", "reverse-kaplan-meier"),
    ("never", "isotonic"),
]


def _counts(outcomes: list[Outcome], ticks: Ticks = TICKS) -> Counts:
    return curve_counts.add(Counts(ticks), outcomes)


def _played(feeds: list[Feed], count: int, seed: int, off_ticks: bool = False) -> Curve:
    # Competing bids are the square of a uniform share of 120, so F at a price p is sqrt(p / 120).
    rng = np.random.default_rng(seed)
    competing = np.ceil(120 * rng.random(count) ** 2).astype(int)
    bids = rng.integers(1, 101, count) if off_ticks else 10 * rng.integers(1, 11, count)
    outcomes = []
    for at, (bid, m) in enumerate(zip(bids.tolist(), competing.tolist(), strict=True)):
        feed = feeds[at % len(feeds)]
        told = feed == "always" or feed == ("on_win" if m <= bid else "on_loss")
        outcomes.append(Outcome(bid, m <= bid, m if told else None, feed))
    return curve(_counts(outcomes))


def _truth(one: Curve) -> Numbers:
    return np.sqrt(one.price / 120)


def test_second_price_by_hand() -> None:
    """Competing bids seen at 2, 3, 4, 5 and bids of 4 and 6 beaten; nothing beyond 6."""
    pairs = [(60, 20), (60, 30), (60, 40), (40, None), (60, 50), (60, None)]
    one = curve(_counts([Outcome(bid, m is not None, m, "on_win") for bid, m in pairs]))
    assert one.share[2:6] == pytest.approx([1 / 6, 1 / 3, 1 / 2, 3 / 4])
    assert one.share[6] == pytest.approx(3 / 4)
    assert np.isnan(one.share[7:]).all()
    assert one.identified_range == (0.0, 60.0)


def test_left_censored_by_hand() -> None:
    """(1, below), (2, seen), (3, below), (4, seen), (5, seen); nothing below 1."""
    pairs = [(10, None), (10, 20), (30, None), (10, 40), (10, 50)]
    one = curve(_counts([Outcome(bid, m is None, m, "on_loss") for bid, m in pairs]))
    assert one.share[1:6] == pytest.approx([0.3, 0.6, 0.6, 0.8, 1.0])
    assert np.isnan(one.share[0])


def test_win_and_loss_by_hand() -> None:
    """Bids 1 to 6 with outcomes 0,1,0,0,1,1; neither below the first nor above the last."""
    won = [False, True, False, False, True, True]
    outcomes = [Outcome(10 * bid, won, None, "never") for bid, won in enumerate(won, 1)]
    one = curve(_counts(outcomes))
    assert one.share[1:7] == pytest.approx([0, 1 / 3, 1 / 3, 1 / 3, 1, 1])
    assert one.identified_range == (10.0, 60.0)


@pytest.mark.parametrize("off_ticks", [False, True])
@pytest.mark.parametrize(("feed", "method"), FEEDS)
def test_each_feed_finds_the_curve(feed: Feed, method: str, off_ticks: bool) -> None:
    """20,000 auctions: within 0.03; win or loss off the ticks may lag by one tick."""
    one = _played([feed], 20_000, 1, off_ticks)
    known = one.identified
    assert one.method == method
    assert known.sum() >= 9
    below = _truth(one)[known] - one.share[known]
    lag = np.diff(_truth(one), prepend=0.0)[known] if feed == "never" and off_ticks else 0.0
    assert (below <= 0.03 + lag).all()
    assert (below >= -0.03).all()


@pytest.mark.parametrize("off_ticks", [False, True])
@pytest.mark.parametrize(
    "feeds", [["on_win", "on_loss"], ["on_win", "never"], ["always", "on_loss", "never"]]
)
def test_mixed_feeds_find_the_curve(feeds: list[Feed], off_ticks: bool) -> None:
    """Turnbull's estimate within 0.04 wherever it says something."""
    one = _played(feeds, 10_000, 2, off_ticks)
    known = one.identified
    assert one.method == "turnbull"
    assert known.sum() >= 8
    assert np.abs(one.share - _truth(one))[known].max() <= 0.04


@pytest.mark.parametrize(("feed", "_method"), FEEDS)
def test_the_interval_holds_the_estimate_and_most_often_the_truth(feed: Feed, _method: str) -> None:
    """At 100 markets of 300 auctions, in the middle; rising in the price, from 0 to 1."""
    missed = 0
    for seed in range(100):
        one = _played([feed], 300, seed)
        known = one.identified
        assert (one.low[known] <= one.share[known] + 1e-12).all()
        assert (one.high[known] >= one.share[known] - 1e-12).all()
        assert (np.diff(one.low) >= 0).all()
        assert (np.diff(one.high) >= 0).all()
        missed += not one.low[5] <= _truth(one)[5] <= one.high[5]
    assert missed <= 14


def test_nothing_is_said_beyond_the_largest_bid() -> None:
    """Bids of at most 40: the estimate ends there, the upper end is 1, the lower does not rise."""
    outcomes = [Outcome(40, m <= 40, m if m <= 40 else None, "on_win") for m in range(100)]
    one = curve(_counts(outcomes))
    assert one.identified_range == (0.0, 40.0)
    assert np.isnan(one.share[5:]).all()
    assert (one.high[5:] == 1.0).all()
    assert (one.low[5:] == one.low[4]).all()


def test_nothing_known_is_said_so() -> None:
    """No estimate, every chance possible."""
    one = curve(Counts(TICKS))
    assert (one.method, one.identified_range, one.auctions) == ("nothing", None, 0.0)
    assert (one.low == 0.0).all()
    assert (one.high == 1.0).all()


def test_forgetting_follows_a_market_that_moves() -> None:
    """After a jump of the prices the curve with forgetting is near the new one."""
    kept, plain = Counts(TICKS), Counts(TICKS)
    for moment in range(40):
        m = 20 if moment < 20 else 70
        outcomes = [Outcome(100, True, m, "always")] * 50
        kept = curve_counts.add(curve_counts.discount(kept, 3 * 2**30), outcomes)
        plain = curve_counts.add(plain, outcomes)
    assert curve(plain).share[5] == pytest.approx(0.5)
    assert curve(kept).share[5] == pytest.approx(0.75**20, abs=1e-3)
    assert curve(kept).auctions == pytest.approx(200, abs=1)
