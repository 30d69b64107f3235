"""What a first-price bidder may choose from, by what its feed tells."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner import curve_counts
from service.learner.curve_counts import Counts, Feed, Outcome
from service.learner.offers import first_price, offers
from service.learner.partition import Ticks

TICKS = Ticks(1000, 10)
FEEDS: list[Feed] = ["always", "on_win", "on_loss", "never"]


@pytest.mark.parametrize("feed", FEEDS)
def test_at_first_the_least_that_is_tried_is_bid(feed: Feed) -> None:
    """Nothing known: the lowest of twenty bids is hoped for, at any value above it."""
    bids = first_price(Counts(TICKS), feed, np.array([40.0, 60.0, 900.0]))
    assert bids.tolist() == [0.0, 50.0, 50.0]


def test_beyond_the_highest_bid_made_a_few_are_hoped_for() -> None:
    """After bids of 50 that lost, the next of the twenty is tried, not the next tick."""
    outcomes = [Outcome(50, False, None, "on_win")] * 30
    counts = curve_counts.add(Counts(TICKS), outcomes)
    price, chance = offers(counts, "on_win")
    assert price[chance > 0].tolist() == list(range(100, 1001, 50))
    assert first_price(counts, "on_win", np.array([900.0])).tolist() == [100.0]


def test_a_full_curve_is_taken_as_it_is() -> None:
    """Half the competing bids at 200, half at 600: which is bid depends on the value."""
    outcomes = [Outcome(50, False, m, "always") for m in (200, 600)] * 500
    counts = curve_counts.add(Counts(TICKS), outcomes)
    bids = first_price(counts, "always", np.array([150.0, 500.0, 990.0, 5000.0]))
    assert bids[1:].tolist() == [200.0, 200.0, 600.0]
    assert bids[0] < 150


def test_win_and_loss_are_tried_on_few_bids() -> None:
    """As many as are asked for; each with its upper end."""
    counts = curve_counts.add(Counts(TICKS), [Outcome(500, True, None, "never")] * 10)
    price, chance = offers(counts, "never", tried=4)
    assert price.tolist() == [250.0, 500.0, 750.0, 1000.0]
    assert chance.tolist() == [1.0] * 4
