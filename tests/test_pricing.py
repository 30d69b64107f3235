"""From a snapshot to a price that may leave, by hand: cap, floor, money, fees and currencies."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.currencies import inside, leaving
from service.decision.opportunity import Opportunity
from service.decision.price import Ready, ready
from service.decision.terms import Terms
from service.guard.fees import NONE, Fees
from service.guard.gate import Limits
from service.guard.scale import PLAIN, WHOLE, Rate, Rates, Scale
from service.learner.memory import Memory
from service.pricing import Priced, Put, Unpriced, gross, priced
from tests.rehearsal.orders import SCALE, config

PRICE = SCALE // 2  # The flat price of the rule.
RICH = 10**15
DOLLAR = Rate(1, "USD", "EUR", 900_000_000, 0, None)
POUND = Rate(2, "GBP", "EUR", 1_200_000_000, 0, 1_000)


def rule(**changes: Any) -> Ready:
    """A flat price over an empty memory."""
    return ready(Memory.fresh(), Terms.from_config(config("flat", **changes)))


def limits(cap: int = SCALE, fees: Fees = NONE) -> Limits:
    """A flight without end and no freeze."""
    return Limits(cap, 0, None, False, fees)


def answer(
    put: Put | Opportunity, free: int = RICH, set_by: str | None = None, **bound: Any
) -> Priced | Unpriced:
    """The answer to something for sale."""
    what = put if isinstance(put, Put) else Put(put, put)
    return priced(rule(), limits(**bound), what, free, np.random.default_rng(1), set_by)


def for_sale(**said: Any) -> Opportunity:
    """An impression without a floor."""
    return Opportunity("rehearsed", **said)


def sent(found: Priced | Unpriced) -> int:
    """What is answered, which must be a price."""
    assert isinstance(found, Priced), found
    return found.sent


@pytest.mark.parametrize(
    ("cap", "free", "price", "set_by"),
    [
        (SCALE, RICH, PRICE, "value"),
        (PRICE, RICH, PRICE, "value"),
        (PRICE - 1, RICH, PRICE - 1, "cap"),
        (SCALE, PRICE - 1, PRICE - 1, "money_in_hand"),
        (7, 5, 5, "money_in_hand"),
        (5, 7, 5, "cap"),
        (1, RICH, 1, "cap"),
    ],
)
def test_the_least_limit_sets_the_price(cap: int, free: int, price: int, set_by: str) -> None:
    """Value, cap and money in hand: the lowest of them leaves, and is named."""
    found = answer(for_sale(), free, cap=cap)
    assert isinstance(found, Priced)
    assert (found.sent, found.cleared.price, found.proposed) == (price, price, PRICE)
    if set_by == "value":
        assert found.cleared.set_by not in ("cap", "money_in_hand")
    else:
        assert found.cleared.set_by == set_by


@pytest.mark.parametrize(
    ("floor", "free", "reason"),
    [
        (PRICE + 1, RICH, "under_floor"),
        (PRICE, PRICE - 1, "budget_held"),
        (0, 0, "budget_held"),
        (1, 0, "budget_held"),
    ],
)
def test_a_price_that_cannot_win_does_not_leave(floor: int, free: int, reason: str) -> None:
    """Below the floor by value, or below it by money: each has its own word, said by the guard."""
    found = answer(for_sale(floor=floor), free)
    assert isinstance(found, Unpriced)
    assert (found.reason, found.cut) == (reason, True)
    assert found.sale.floor == floor


def test_a_cap_of_nothing_lets_nothing_out() -> None:
    """Though a floor of nothing would take it."""
    found = answer(for_sale(), cap=0)
    assert isinstance(found, Unpriced)
    assert found.reason == "price_rounds_to_zero"


def test_somebody_else_may_be_named_as_who_set_it() -> None:
    """A control share says its own name, unless a limit binds after it."""
    named = answer(for_sale(), set_by="control")
    assert isinstance(named, Priced)
    assert named.cleared.set_by == "control"
    capped = answer(for_sale(), set_by="control", cap=9)
    assert isinstance(capped, Priced)
    assert capped.cleared.set_by == "cap"


@pytest.mark.parametrize(
    ("fees", "price"),
    [
        (Fees(10**8, 0), 454_545_454),  # Half a milliard over 1.1, rounded down.
        (Fees(0, 100_000_000), 400_000_000),
        (Fees(10**9, 100_000_000), 200_000_000),
    ],
)
def test_a_price_leaves_net_of_fees(fees: Fees, price: int) -> None:
    """What is held is what it costs with them, and never more than was proposed."""
    found = answer(for_sale(), fees=fees)
    assert isinstance(found, Priced)
    assert found.sent == price
    assert found.cleared.price == fees.gross(price) <= PRICE


def test_fees_above_the_price_leave_nothing() -> None:
    """A fee for every impression that eats the whole value is a pass and no bid of 0."""
    for flat in (PRICE, PRICE + 1):
        found = answer(for_sale(), fees=Fees(0, flat))
        assert isinstance(found, Unpriced)
        assert found.reason == "price_rounds_to_zero"


def test_a_floor_is_compared_with_its_fees() -> None:
    """A floor of 454,545,454 costs just what is there with a tenth on top; one more does not."""
    fees = Fees(10**8, 0)
    assert sent(answer(for_sale(floor=454_545_454), fees=fees)) == 454_545_454
    found = answer(for_sale(floor=454_545_455), fees=fees)
    assert isinstance(found, Unpriced)
    assert found.reason == "under_floor"


@given(
    cap=some.integers(1, SCALE),
    free=some.integers(1, SCALE),
    floor=some.integers(0, SCALE),
    share=some.integers(0, 10**9),
    flat=some.integers(0, SCALE // 4),
)
def test_no_price_breaks_a_limit(cap: int, free: int, floor: int, share: int, flat: int) -> None:
    """What may be paid is within cap, money and value, and what leaves reaches the floor."""
    fees = Fees(share, flat)
    found = answer(for_sale(floor=floor), free, cap=cap, fees=fees)
    if isinstance(found, Priced):
        assert found.sent >= max(floor, 1)
        assert found.cleared.price <= min(cap, free, PRICE)
        assert fees.gross(found.sent) == found.cleared.price


@given(
    rate=some.integers(10**6, 10**12),
    floor=some.integers(0, SCALE),
    multiplier=some.integers(10**8, 10**10),
)
def test_no_currency_breaks_a_limit(rate: int, floor: int, multiplier: int) -> None:
    """Rounded down on its way out and up on its way in, a hold stays within what was proposed."""
    rates = Rates([Rate(1, "USD", "EUR", rate, 0, None)])
    asked = for_sale(floor=floor, currencies=("USD",), floor_currency="USD", multiplier=multiplier)
    turned = inside(asked, "EUR", rates, 5)
    assert turned is not None
    found = answer(Put(turned[0], asked, turned[1]))
    if isinstance(found, Priced):
        assert 0 < found.cleared.price <= PRICE
        assert turned[1].worth(found.sent) >= turned[0].floor


@pytest.mark.parametrize("price", [1, PRICE - 1, PRICE])
def test_a_fixed_price_is_taken_as_it_is(price: int) -> None:
    """It is met to the nano where the value reaches it."""
    assert sent(answer(for_sale(auction="fixed", price=price))) == price


def test_a_fixed_price_above_the_value_is_left() -> None:
    """One nano more than the value is under its floor."""
    found = answer(for_sale(auction="fixed", price=PRICE + 1))
    assert isinstance(found, Unpriced)
    assert found.reason == "under_floor"


def test_no_fees_leave_an_opportunity_as_it_is() -> None:
    """The same one, not a copy: every bid asks."""
    asked = for_sale(floor=5)
    assert gross(asked, NONE) is asked


@pytest.mark.parametrize(
    ("floor", "price", "dear", "dear_price"),
    [(0, None, 0, None), (100, None, 115, None), (0, 100, 0, 115), (1, 101, 7, 117)],
)
def test_what_is_for_sale_is_put_at_its_cost(
    floor: int, price: int | None, dear: int, dear_price: int | None
) -> None:
    """A tenth and 5 on top, rounded up; no floor stays no floor and no price no price."""
    found = gross(for_sale(floor=floor, price=price), Fees(10**8, 5))
    assert (found.floor, found.price) == (dear, dear_price)


def test_without_currencies_nothing_is_turned() -> None:
    """The line item's own price goes out as it is, without a rate."""
    asked = for_sale(floor=5)
    assert inside(asked, "EUR", Rates(), 0) == (asked, PLAIN)


@pytest.mark.parametrize(
    ("currencies", "floor_currency", "floor", "wall_ms", "taken"),
    [
        (("USD",), "USD", 0, 5, "USD"),
        (("USD", "GBP"), "USD", 0, 5, "USD"),
        (("GBP", "USD"), "USD", 0, 5, "GBP"),
        (("GBP", "USD"), "USD", 0, 1_000, "USD"),  # The pound's rate has ended.
        (("GBP",), "USD", 0, 1_000, None),
        (("CHF", "USD"), "USD", 0, 5, "USD"),
        (("CHF",), "CHF", 0, 5, None),
        (("USD", "EUR"), "USD", 0, 5, "EUR"),
        (("EUR",), "CHF", 0, 5, "EUR"),  # No floor, so nobody asks what it is worth.
        (("EUR",), "CHF", 1, 5, None),
        (("EUR",), "", 1, 5, "EUR"),
        (("USD",), "GBP", 1, 1_000, None),
    ],
)
def test_the_first_wish_with_a_rate_is_taken(
    currencies: tuple[str, ...], floor_currency: str, floor: int, wall_ms: int, taken: str | None
) -> None:
    """The own currency before all; and without a rate for price or floor there is no price."""
    asked = for_sale(currencies=currencies, floor_currency=floor_currency, floor=floor)
    found = inside(asked, "EUR", Rates([DOLLAR, POUND]), wall_ms)
    assert (None if found is None else found[1].currency) == taken


def test_a_floor_is_turned_into_the_own_currency() -> None:
    """100 dollars at 0.9 are 90 euros, 101 are 90.9 and so 91: a floor rounds up."""
    for floor, worth in ((100, 90), (101, 91)):
        asked = for_sale(currencies=("USD",), floor_currency="USD", floor=floor, price=floor)
        found = inside(asked, "EUR", Rates([DOLLAR]), 0)
        assert found is not None
        assert (found[0].floor, found[0].price) == (worth, worth)


def test_the_newest_rate_counts_from_its_moment() -> None:
    """Of two from one moment the later posted one; before any of them there is none."""
    rates = Rates(
        [
            Rate(1, "USD", "EUR", 5, 10, None),
            Rate(2, "USD", "EUR", 6, 10, None),
            Rate(3, "USD", "EUR", 7, 20, 30),
        ]
    )
    assert [rates.at("USD", "EUR", at) for at in (9, 10, 19, 20, 29)] == [None, 6, 6, 7, 7]
    # An end is an end: the older rate does not come back after it.
    assert rates.at("USD", "EUR", 30) is None
    assert rates.at("EUR", "USD", 20) is None
    assert rates.at("EUR", "EUR", 0) == WHOLE


@given(net=some.integers(0, 10**15), rate=some.integers(1, 10**13), many=some.integers(1, 10**11))
def test_the_way_out_and_back_never_costs_more(net: int, rate: int, many: int) -> None:
    """The price that leaves is the largest whose cost is within what was meant."""
    scale = Scale("USD", rate, many)
    price = scale.sent(net)
    assert scale.worth(price) <= net
    assert scale.worth(price + 1) > net
    assert scale.held(price) <= scale.worth(price)


@given(price=some.integers(0, 10**12), rate=some.integers(1, 10**13), many=some.integers(1, 10**11))
def test_a_clearing_price_within_the_bid_is_within_its_hold(
    price: int, rate: int, many: int
) -> None:
    """Half to even is never above rounding up."""
    scale = Scale("USD", rate, many)
    assert scale.paid(price) <= scale.held(price)
    assert scale.paid(price, many // 2) <= scale.paid(price)


@pytest.mark.parametrize(("price", "paid"), [(1, 0), (2, 1), (3, 2), (5, 2), (7, 4)])
def test_a_cost_rounds_half_to_even(price: int, paid: int) -> None:
    """At a rate of a half: 0.5, 1, 1.5, 2.5 and 3.5 become 0, 1, 2, 2 and 4."""
    assert Scale("USD", WHOLE // 2).paid(price) == paid


@pytest.mark.parametrize(
    ("delivered", "paid"),
    [(None, 400), (3 * WHOLE, 300), (4 * WHOLE, 400), (5 * WHOLE, 400), (0, 400), (-1, 400)],
)
def test_only_what_was_delivered_is_paid(delivered: int | None, paid: int) -> None:
    """Of four impressions three were shown; more than were bought, or none told, pay for four."""
    assert Scale("", WHOLE, 4 * WHOLE).paid(100, delivered) == paid


def test_a_fixed_price_never_leaves_above_what_is_asked() -> None:
    """At a rate of 0.007 a net that was rounded up would come back as more dollars than asked."""
    asked = for_sale(auction="fixed", price=100_000_001, currencies=("USD",), floor_currency="USD")
    scale = Scale("USD", 7_000_000)
    net = scale.worth(100_000_001)
    assert leaving(scale, net, asked, fixed=False) > 100_000_001
    assert leaving(scale, net, asked, fixed=True) == 100_000_001


def test_a_fixed_price_in_another_currency_is_not_compared() -> None:
    """A number of pounds is no limit to a number of dollars."""
    asked = for_sale(auction="fixed", price=5, floor_currency="GBP")
    assert leaving(Scale("USD", WHOLE), 100, asked, fixed=True) == 100


def test_the_plain_scale_changes_nothing() -> None:
    """Out, back and paid: the same number."""
    for way in (PLAIN.sent, PLAIN.worth, PLAIN.held, PLAIN.paid):
        assert way(123_456_789) == 123_456_789
