"""What people read of a request: every step in words, with units, and nothing of the person."""

from __future__ import annotations

import json
from typing import Any

import pytest

from service.openrtb.explaining import explain, lines_of
from tests.openrtb.sources import mapped, request

DEAL = {"id": "d1", "bidfloor": 2, "at": 3, "bidfloorcur": "EUR"}


def said(body: object, *lines: dict[str, Any], **source: Any) -> list[str]:
    """The lines for a terminal."""
    return lines_of(explain("north", mapped(*lines, **source), body))


def test_a_plain_request_is_told_step_by_step() -> None:
    """Source, auction, deadline, features, who may bid, and what is asked."""
    body = request({"tagid": "a", "bidfloor": 0.25}, tmax=120, device={"devicetype": 4})
    assert said(body) == [
        "source north: asks for prices",
        "  auction second, deadline 100 ms, currencies USD",
        "  imp 1",
        "    feature device = 4",
        "    feature tag = a",
        "    line item garden (banner) may bid",
        "    asks garden for the open auction: second price, floor 0.25 USD CPM",
    ]


def test_a_deal_at_a_price_with_many_impressions_is_told_with_its_units() -> None:
    """A fixed sale has a price and no floor; the quantity is in impressions."""
    body = request({"pmp": {"deals": [DEAL], "private_auction": 1}, "qty": {"multiplier": 2.5}})
    lines = said(body, {"deals": ["d1"]})
    assert lines[-1] == (
        "    asks garden for deal d1: fixed price, price 2.0 EUR CPM, 2.50 impressions"
    )


def test_a_test_is_told_to_be_one() -> None:
    """It is answered, and nothing is set aside."""
    assert "  a test: answered without money" in said(request(test=1))


@pytest.mark.parametrize(
    ("body", "lines"),
    [
        ([], ["source north: 400, malformed", "  because: not an object"]),
        ({"id": "r"}, ["source north: 400, malformed", "  because: no imp, or too many"]),
        (request(tmax=1), ["source north: no bid", "  because: no_time"]),
        (request(cur=["££"]), ["source north: no bid", "  because: no_currency"]),
    ],
)
def test_what_asks_nobody_says_why(body: object, lines: list[str]) -> None:
    """In two lines: what is answered and because of what."""
    assert said(body) == lines


def test_an_unknown_kind_of_auction_and_no_deadline_are_words() -> None:
    """Nothing is left empty for a person to wonder about."""
    lines = said(request(at=77))
    assert lines[1] == "  auction unknown, deadline the service's own, currencies USD"
    assert lines[-2:] == [
        "    line item garden (banner) does not bid: auction_unknown",
        "    asks nobody",
    ]


def test_every_line_item_has_a_verdict_of_its_own() -> None:
    """In the order of the mapping, with the one word that stands against it."""
    lines = said(
        request(),
        {"line_item": "a", "type": "video"},
        {"line_item": "b", "sizes": ["1x1"]},
        {"line_item": "c"},
    )
    assert [line for line in lines if "line item" in line] == [
        "    line item a (video) does not bid: other_type",
        "    line item b (banner) does not bid: size",
        "    line item c (banner) may bid",
    ]
    assert lines[-1].startswith("    asks c for the open auction")


def test_those_on_the_same_terms_are_named_together() -> None:
    """They compete inside, and the seller is sent one price."""
    lines = said(request(), {"line_item": "a"}, {"line_item": "b"})
    assert lines[-1] == "    asks a, b for the open auction: second price, floor 0.0 USD CPM"


def test_what_is_missing_is_told() -> None:
    """A feature that the request does not say is named, so that a mapping can be mended."""
    told = explain("north", mapped(), request({"tagid": "a"}))
    assert (told["imps"][0]["features"], told["imps"][0]["features_missing"]) == (
        {"tag": "a"},
        ["device"],
    )


def test_nothing_of_a_person_is_repeated() -> None:
    """Whatever the request tells of somebody, the answer is the same without it."""
    secret: dict[str, Any] = {
        "user": {"id": "person-1", "geo": {"lat": 1.5}},
        "device": {"ip": "192.0.2.7", "ifa": "device-9", "ua": "browser-5"},
        "site": {"page": "https://page.example/private"},
    }
    source = mapped()
    with_it, without = (explain("north", source, request(**more)) for more in (secret, {}))
    assert with_it == without
    assert "person-1" not in json.dumps(with_it)


def test_the_answer_is_json_in_full() -> None:
    """Floors as CPM numbers with their currency, the number of ways, and the no-bid code."""
    told = explain("north", mapped({"deals": "any"}), request({"pmp": {"deals": [DEAL]}}))
    assert json.loads(json.dumps(told)) == told
    assert told["imps"][0]["line_items"] == [
        {"line_item": "garden", "type": "banner", "may_bid": True, "ways": 2}
    ]
    assert told["imps"][0]["asks"] == [
        {
            "line_items": ["garden"],
            **{"deal": "d1", "auction": "fixed", "floor_cpm": 2.0, "floor_currency": "EUR"},
        },
        {
            "line_items": ["garden"],
            **{"deal": None, "auction": "second", "floor_cpm": 0.0, "floor_currency": "USD"},
        },
    ]
    assert explain("north", mapped(), request(tmax=0))["nbr"] == 15
