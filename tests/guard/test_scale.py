"""Prices of other currencies: the bid down, the hold up, and spend half to even."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service import money
from service.guard.scale import PLAIN, WHOLE, Rate, Rates, Scale

scales = some.builds(
    Scale, some.just("USD"), some.integers(1, 10**13), some.integers(10**5, 10**12)
)
prices = some.integers(1, money.PRICE_NANOS_MAX)


@given(prices)
def test_without_a_scale_nothing_changes(price: int) -> None:
    """The line item's own currency and one impression: every amount is the price itself."""
    amounts = (PLAIN.sent(price), PLAIN.worth(price), PLAIN.held(price), PLAIN.paid(price))
    assert amounts == (price,) * 4


@given(scales, prices)
def test_a_hold_never_falls_short_of_what_is_asked_for_the_bid(scale: Scale, net: int) -> None:
    """What leaves for `net` holds at most `net` and costs at most its hold."""
    sent = scale.sent(net)
    assert scale.held(sent) <= scale.worth(sent) <= net
    assert scale.paid(sent) <= scale.held(sent)
    # Not too careful either: one nano more would be beyond the money.
    assert Fraction(sent + 1) * scale.rate * max(scale.multiplier, WHOLE) > net * WHOLE**2


@given(scales, prices)
def test_a_bid_of_the_floors_worth_reaches_the_floor(scale: Scale, floor: int) -> None:
    """Both roundings together never send a bid below a floor of its own currency."""
    assert scale.sent(scale.worth(floor)) >= floor


@pytest.mark.parametrize(
    ("price_nanos", "rate", "multiplier", "cost"),
    [
        (3, WHOLE // 2, WHOLE, 2),  # 1.5 rounds to the even 2.
        (5, WHOLE // 2, WHOLE, 2),  # 2.5 rounds to the even 2.
        (money.price("2.50"), WHOLE, 30_300_000_000, money.nanos("0.07575")),
    ],
)
def test_costs_round_half_to_even(price_nanos: int, rate: int, multiplier: int, cost: int) -> None:
    """
    A price outside becomes a cost inside, exactly but for the last nano.

    2.50 CPM times 30.3 impressions cost 0.07575: OpenRTB 2.x, implementation guide 7.9.4 (IAB
    Tech Lab, tag 2.6-202606; Creative Commons Attribution 3.0).
    """
    assert Scale("USD", rate, multiplier).paid(price_nanos) == cost


def test_only_what_was_asked_for_is_paid() -> None:
    """Fewer impressions than expected cost less; more or none at all were never bought."""
    scale = Scale("USD", WHOLE, 10 * WHOLE)
    told = (4 * WHOLE, 10 * WHOLE, 11 * WHOLE, 0, -1, None)
    assert [scale.paid(100, count) for count in told] == [400, 1000, 1000, 1000, 1000, 1000]


def test_the_newest_rate_that_has_begun_counts() -> None:
    """Of two from one moment the later one; before the first and after the end there is none."""
    rates = Rates(
        [
            Rate(1, "USD", "EUR", 10, from_ms=100),
            Rate(3, "USD", "EUR", 30, from_ms=200, until_ms=300),
            Rate(2, "USD", "EUR", 20, from_ms=200),
        ]
    )
    found = [rates.at("USD", "EUR", moment_ms) for moment_ms in (99, 100, 199, 200, 299, 300)]
    assert found == [None, 10, 10, 30, 30, None]
    assert (rates.at("EUR", "USD", 250), rates.at("EUR", "EUR", 0)) == (None, WHOLE)
