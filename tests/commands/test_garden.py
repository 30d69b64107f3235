"""The invented market is seeded, of the asked size, and as its line items say."""

from __future__ import annotations

import numpy as np
import pytest

from service import money
from service.commands import garden
from service.commands.exchange import Auction

COUNT = 100_000


def of_one(line_item: str, seed: int = 1) -> list[Auction]:
    """The auctions of one line item out of a large market."""
    auctions = garden.market(garden.line_items(), COUNT, seed)
    return [auction for auction in auctions if auction.line_item == line_item]


def test_the_same_seed_draws_the_same_auctions_in_the_same_order() -> None:
    """Another seed draws others."""
    planned = garden.line_items()
    first, again = garden.market(planned, 500, 3), garden.market(planned, 500, 3)
    assert first == again
    assert first != garden.market(planned, 500, 4)


@pytest.mark.parametrize("count", [0, 1, 7, 24_000])
def test_the_market_has_exactly_as_many_auctions_as_asked(count: int) -> None:
    """Rounding of shares loses none, and every auction has its own number."""
    auctions = garden.market(garden.line_items(), count, 7)
    assert sorted(auction.number for auction in auctions) == list(range(count))


@pytest.mark.parametrize("planned", garden.line_items(), ids=lambda planned: planned.id)
def test_values_have_the_mean_that_the_table_calls_true(planned: garden.Planned) -> None:
    """Within five standard errors of a large seeded sample."""
    values = np.array([auction.value or 0 for auction in of_one(planned.id)], dtype=float)
    error = values.std() / np.sqrt(len(values))
    assert abs(values.mean() - planned.mean * money.NANOS_PER_UNIT) < 5 * error


@pytest.mark.parametrize("planned", garden.line_items(), ids=lambda planned: planned.id)
def test_zero_is_reported_only_where_a_value_comes_once(planned: garden.Planned) -> None:
    """Where value accrues, an impression that brings nothing is never heard of."""
    values = {auction.value for auction in of_one(planned.id)}
    assert (0 in values) == planned.zero_is_news
    assert (None in values) != planned.zero_is_news


def test_one_line_item_has_one_value_in_a_thousand_impressions() -> None:
    """About 50 among 50,000, within five standard deviations."""
    hits = sum(auction.value is not None for auction in of_one("season-pass"))
    assert 50 - 35 < hits < 50 + 35


def test_competing_bids_have_the_announced_median() -> None:
    """Every price is a positive whole number of nanos."""
    rivals = [auction.rival for auction in of_one("season-pass")]
    assert min(rivals) > 0
    assert np.median(rivals) == pytest.approx(money.price(3), rel=0.03)
