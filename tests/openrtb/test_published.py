"""Every published example and number table: what must be read, and what must be refused."""

from __future__ import annotations

import json
from decimal import Decimal
from typing import Any

import pytest

from service import money
from service.guard.scale import WHOLE, Rate, Rates, Scale
from service.openrtb import macros
from service.openrtb.bodies import BadBody, parsed
from service.openrtb.floors import multiplier_of
from service.openrtb.offers import Terms, lots
from service.openrtb.requests import Asked, read
from tests.openrtb import published
from tests.openrtb.sources import asked, judged, mapped
from tests.openrtb.standard import bids_of, faults

EVERY_TYPE: list[dict[str, Any]] = [
    *({"type": kind, "line_item": kind, "deals": "any"} for kind in ("banner", "native", "audio")),
    {"type": "video", "line_item": "video", "deals": "any", "duration_s": 15},
]


@pytest.mark.parametrize("section", published.REQUESTS)
def test_a_published_request_is_read(section: str) -> None:
    """As bytes, with all that no table lists: one imp, and at least one way to buy it."""
    body = parsed(json.dumps(published.REQUESTS[section]).encode())
    source = mapped(*EVERY_TYPE, seat="Agency1")
    found = read(body, source)
    assert isinstance(found, Asked)
    assert [imp["id"] for imp in found.imps] == ["1"]
    assert lots(found.imps[0], found, source)


@pytest.mark.parametrize(
    ("section", "auction", "currencies", "deadline_ms", "floor_cpm"),
    [
        ("6.2.1", "first", ("USD",), None, "0.03"),
        ("6.2.2", "second", ("USD",), None, "0.03"),
        ("6.2.3", "second", ("USD",), None, "0.5"),
        ("6.2.4", "second", ("USD",), 100, "0.03"),
    ],
)
def test_the_published_terms_are_those_we_price_by(
    section: str, auction: str, currencies: tuple[str, ...], deadline_ms: int, floor_cpm: str
) -> None:
    """Auction, currency, time (120 ms less 20 ms for the way) and floor, defaults filled in."""
    source = mapped(*EVERY_TYPE)
    found = asked(published.REQUESTS[section], source)
    ((terms, _),) = lots(found.imps[0], found, source)
    assert (found.auction, found.currencies, found.deadline_ms) == (
        *(auction, currencies, deadline_ms),
    )
    assert terms == Terms(None, auction, money.price(floor_cpm), "USD", WHOLE)


@pytest.mark.parametrize(
    ("seat", "deal", "auction", "floor_cpm"),
    [("Agency1", "AB-Agency1-0001", "first", "2.5"), ("Agency2", "XY-Agency2-0001", "second", "2")],
)
def test_each_seat_has_its_published_deal(
    seat: str, deal: str, auction: str, floor_cpm: str
) -> None:
    """6.2.5: the deal's auction and floor, in dollars, and not the imp's 0.03."""
    ways = judged({"deals": "any"}, published.DEALS, seat=seat)
    assert ways == (Terms(deal, auction, money.price(floor_cpm), "USD", WHOLE),)


@pytest.mark.parametrize(
    ("line", "seat", "reason"),
    [
        ({"deals": "any"}, "Agency3", "private_auction"),
        ({"deals": "any"}, None, "private_auction"),
        ({"deals": ["XY-Agency2-0001"]}, "Agency1", "private_auction"),
        ({}, "Agency1", "private_auction"),
    ],
)
def test_a_private_auction_is_for_its_seats(
    line: dict[str, object], seat: str | None, reason: str
) -> None:
    """6.2.5: another seat, no seat, another deal or none buys nothing."""
    assert judged(line, published.DEALS, seat=seat) == reason


@pytest.mark.parametrize(
    ("line", "reason"),
    [
        ({"cat": ["IAB25-3"]}, "category_blocked"),
        ({"cat": ["IAB8-18"]}, "category_blocked"),
        ({"cat": ["IAB8-1"]}, None),
        ({"adomain": ["blocked-one.example"]}, "advertiser_blocked"),
        ({"adomain": ["shop.Blocked-Two.example"]}, "advertiser_blocked"),
        ({"adomain": ["not-blocked-one.example"]}, None),
        ({"attr": [14]}, "attribute_blocked"),
        ({"sizes": ["300x250"]}, "size"),
        ({"type": "video"}, "other_type"),
    ],
)
def test_what_the_published_app_blocks_is_not_bid(
    line: dict[str, object], reason: str | None
) -> None:
    """6.2.3: categories with all below them, domains with all below them, attributes, sizes."""
    found = judged(line, published.APP)
    assert found == reason if reason else isinstance(found, tuple)


def test_pounds_and_dollars_are_told_apart() -> None:
    """
    7.9.6.3: the imp's floor is 5 pounds, and the deal's 5 are dollars, whatever the imp says.

    A deal inherits no currency; who reads its floor as pounds asks a quarter too much of himself,
    and who reads the imp's as dollars bids below it.
    """
    line = {"type": "video", "deals": "any", "duration_s": 15}
    ways = judged(line, published.POUNDS_DEALS)
    five, times = money.price("5"), 14_200_000_000
    assert ways == (
        Terms("1234", "first", five, "USD", times),
        Terms(None, "first", five, "GBP", times),
    )


def test_a_published_quantity_is_exact() -> None:
    """7.9.6.1: 14.2 impressions are 14.2, though no binary fraction is."""
    assert multiplier_of(published.POUNDS["imp"][0]) == 14_200_000_000


def test_what_was_delivered_costs_what_is_published() -> None:
    """7.9.4: 2.50 CPM for 30.3 impressions are 0.07575, to the nano."""
    price, count, cost = published.DELIVERED
    heard = macros.hear("billed", {"price": price, "qty": count})
    assert isinstance(heard, macros.Heard)
    assert heard.clearing is not None
    scale = Scale("GBP", WHOLE, 31 * WHOLE)
    assert scale.paid(heard.clearing, heard.delivered) == money.nanos(cost)


def test_a_discounted_price_is_the_price() -> None:
    """7.16: of a bid of 10 with 20 % off, 8 is what is booked; the rest is told beside it."""
    told = published.DISCOUNTED
    heard = macros.hear("win", {"price": told["price"], "pct": told["percent"], "cpm": told["cpm"]})
    assert isinstance(heard, macros.Heard)
    assert heard.clearing == money.price("8")
    bid, percent = Decimal(told["bid"]), Decimal(told["percent"])
    assert bid * (100 - percent) / 100 == Decimal(told["price"]) == bid - Decimal(told["cpm"])


@pytest.mark.parametrize("auction", published.MIN_TO_WIN)
@pytest.mark.parametrize("row", range(4))
def test_the_published_minimum_to_win_is_what_is_learnt(auction: str, row: int) -> None:
    """4.4.1: the winner hears the next bid and a loser the bid to tie with; empty says nothing."""
    prices, least = (table[row] for table in published.MIN_TO_WIN[auction])
    said = {"price": prices or "", "min": least or ""}
    if prices is not None:
        heard = macros.hear("win", said)
        assert isinstance(heard, macros.Heard)
        assert (heard.kind, heard.clearing) == ("won", money.price(prices))
    else:
        # The invalid one is told so, and its loss says nothing of any price.
        reason = {"reason": "102" if published.MIN_TO_WIN_BIDS[row] else "3"}
        heard = macros.hear("loss", said | reason)
        assert isinstance(heard, macros.Heard)
        assert heard.kind == ("lost" if published.MIN_TO_WIN_BIDS[row] else "void")
    assert heard.to_win == (None if least is None else money.price(least))


@pytest.mark.parametrize("section", published.RESPONSES)
def test_a_published_response_is_one_but_for_its_blanks(section: str) -> None:
    """The check that our own answers must pass takes them, and finds the misprints."""
    found = faults(published.RESPONSES[section])
    assert all("cannot be called" in fault for fault in found)
    assert bool(found) == (section in published.BLANKS)


@pytest.mark.parametrize("body", published.NO_BIDS)
def test_the_published_ways_not_to_bid_are_none(body: published.Body) -> None:
    """7.1: an empty object, and no seat with or without a reason."""
    assert (faults(body), bids_of(body)) == ([], [])


def test_published_prices_are_exact() -> None:
    """9.43, 3, 5, 6 and the pods' prices come through as what is printed."""
    bodies = [*published.RESPONSES.values(), *map(_pod, published.PODS)]
    prices = {bid["price"] for body in bodies for bid in bids_of(body)}
    assert prices == {9.43, 3.0, 5.0, 6.0} | published.POD_PRICES
    for price in prices:
        assert money.cpm_number(money.price(Decimal(repr(price)))) == price


@pytest.mark.parametrize("kind", published.PODS)
def test_the_published_pods_are_refused_as_printed(kind: str) -> None:
    """7.6: with a word before it and remarks inside it is no JSON, even without the word."""
    raw = published.pod_request(kind)
    for body in (raw, raw.removeprefix(b"BidRequest\n"), published.pod_response(kind)):
        with pytest.raises(BadBody):
            parsed(body)


def test_the_published_broken_response_is_refused() -> None:
    """7.9.6.4: quotes that are not escaped end the text too early."""
    with pytest.raises(BadBody):
        parsed(published.BROKEN_RESPONSE)


def test_the_trap_in_money() -> None:
    """With both rates the deal's floor is less of the line item's money than the imp's."""
    rates = Rates([Rate(1, "USD", "EUR", 900_000_000, 0), Rate(2, "GBP", "EUR", 1_200_000_000, 0)])
    five = money.price("5")
    worths = [Scale(c, rates.at(c, "EUR", 1) or 0).worth(five) for c in ("USD", "GBP")]
    assert worths == [money.price("4.5"), money.price("6")]


def _pod(kind: str) -> published.Body:
    body = parsed(published.pod_response(kind).removeprefix(b"BidResponse\n"))
    assert isinstance(body, dict)
    return body
