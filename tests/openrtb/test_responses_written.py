"""Each member of a bid as the standard writes it, there only where something is known of it."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service import money
from service.guard.scale import WHOLE
from service.openrtb.offers import Terms
from service.openrtb.responses import Made, response
from tests.openrtb.sources import asked, mapped, request
from tests.openrtb.standard import faults

OPEN = Terms(None, "second", 0, "USD", WHOLE)
VIDEO = {"video": {"mimes": ["video/mp4"]}}


def answered(
    line: dict[str, Any], imp: dict[str, Any] | None = None, price: int = 10**6, **source: Any
) -> dict[str, Any]:
    """The whole answer with one bid of this line."""
    where = mapped(line, **source)
    found = asked(request(imp), where)
    made = Made(found.imps[0], OPEN, where.line_items[0], price, "USD", "ticket", "ref")
    return response(where, found, "b1", [made])


def bid_of(line: dict[str, Any], imp: dict[str, Any] | None = None, **more: Any) -> dict[str, Any]:
    """Its one bid."""
    bid: dict[str, Any] = answered(line, imp, **more)["seatbid"][0]["bid"][0]
    return bid


@pytest.mark.parametrize(
    ("line", "members"),
    [
        ({"crid": "c-9"}, {"crid": "c-9"}),
        ({"cid": "campaign"}, {"cid": "campaign"}),
        ({"adid": "ad"}, {"adid": "ad"}),
        ({"bundle": "app.one"}, {"bundle": "app.one"}),
        ({"language": "de"}, {"language": "de"}),
        ({"iurl": "https://i.example/x.png"}, {"iurl": "https://i.example/x.png"}),
        ({"adomain": ["a.example", "b.example"]}, {"adomain": ["a.example", "b.example"]}),
        ({"cat": ["IAB1"], "cattax": 1}, {"cat": ["IAB1"], "cattax": 1}),
        ({"attr": [1, 2]}, {"attr": [1, 2]}),
        ({"exp_s": 300}, {"exp": 300}),
        ({"adm": "<b>plain</b>"}, {"adm": "<b>plain</b>"}),
        ({"sizes": ["300x250"]}, {"w": 300, "h": 250}),
    ],
)
def test_what_a_line_says_stands_in_its_bid(line: dict[str, Any], members: dict[str, Any]) -> None:
    """Under the standard's name, and absent where the line says nothing."""
    bid = bid_of(line)
    assert {name: bid[name] for name in members} == members
    plain = bid_of({"crid": None, "adomain": []})
    assert set(members) & set(plain) == set()


@pytest.mark.parametrize(
    ("media", "code"), [("banner", 1), ("video", 2), ("audio", 3), ("native", 4)]
)
def test_the_kind_of_markup_has_its_code(media: str, code: int) -> None:
    """List "Creative Markup Types" of OpenRTB 2.6."""
    assert bid_of({"type": media}, {media: {}})["mtype"] == code


def test_a_duration_is_said_of_what_lasts() -> None:
    """In seconds."""
    assert bid_of({"type": "video", "duration_s": 15}, VIDEO)["dur"] == 15


def test_a_category_without_its_taxonomy_is_never_written() -> None:
    """One says nothing without the other."""
    assert "cattax" not in bid_of({"cattax": 7})


def test_our_addresses_are_put_into_markup_wherever_they_are_asked_for() -> None:
    """For video the impression event is the bill; other brackets stay as they are."""
    markup = "[[win_url]] [[billed_url]] [[billed_url]] [[loss_url]] [[other_url]] ${X}"
    text = bid_of({"adm": markup})["adm"]
    assert text.count("https://bids.example/openrtb/billed/ticket?") == 2
    assert text.count("/openrtb/win/ticket?") == text.count("/openrtb/loss/ticket?") == 1
    assert text.endswith("[[other_url]] ${X}")


@pytest.mark.parametrize(
    ("notices", "urls"),
    [
        ([], set()),
        (["win"], {"nurl"}),
        (["billed", "loss"], {"burl", "lurl"}),
        (["win", "billed", "loss"], {"nurl", "burl", "lurl"}),
    ],
)
def test_only_the_notices_a_source_wants_are_written(notices: list[str], urls: set[str]) -> None:
    """Each under the standard's name for it."""
    assert {"nurl", "burl", "lurl"} & set(bid_of({}, notices=notices)) == urls


def test_a_seat_is_named_where_there_is_one() -> None:
    """And the group of bids has no seat where the exchange gave none."""
    assert answered({}, seat="s1")["seatbid"][0]["seat"] == "s1"
    assert "seat" not in answered({})["seatbid"][0]


@given(some.integers(1, money.PRICE_NANOS_MAX))
@settings(max_examples=60, deadline=None)
def test_a_price_read_back_is_the_price_to_the_nano(price: int) -> None:
    """A JSON number keeps all six decimals of a CPM up to the largest price there is."""
    answer = answered({}, price=price)
    written = Decimal(repr(answer["seatbid"][0]["bid"][0]["price"]))
    assert written * money.NANOS_PER_CPM == price


def test_a_full_bid_has_no_fault_by_the_other_reading_of_the_standard() -> None:
    """Every member at once, held against the table that the tests keep of OpenRTB 2.6."""
    line = {
        **{"type": "video", "duration_s": 15, "cat": ["IAB1"], "attr": [1], "bundle": "app.one"},
        **{"language": "de", "cid": "campaign", "adid": "ad", "exp_s": 60, "adm": "<VAST/>"},
    }
    body = request(VIDEO)
    assert faults(answered(line, VIDEO, seat="s1"), body) == []
