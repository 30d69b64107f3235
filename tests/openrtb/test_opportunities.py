"""An imp on some terms as the opportunity every other caller would send, member by member."""

from __future__ import annotations

from typing import Any

import pytest

from service.guard.scale import WHOLE
from service.openrtb.offers import Terms
from service.openrtb.opportunities import features_of, opportunity
from tests.openrtb.sources import asked, mapped, request

SECOND = Terms(None, "second", 400_000, "USD", WHOLE)
FIXED = Terms("d1", "fixed", 2_000_000, "EUR", 3 * WHOLE)


def made(terms: Terms, names: tuple[str, ...] = ("garden",), **changes: Any) -> Any:
    """What the bidder is asked on these terms."""
    source = mapped(*({"line_item": name} for name in names))
    found = asked({**request(**changes), **changes}, source)
    lines = {line.line_item: line for line in source.line_items}
    return opportunity("north", found, terms, lines, {"tag": "a"}, ("USD", "EUR"))


def test_an_open_auction_has_a_floor_and_no_price() -> None:
    """In the currency of the seller, with every currency it takes."""
    one = made(SECOND, tmax=120)
    assert (one.floor, one.price, one.floor_currency) == (400_000, None, "USD")
    assert (one.auction, one.multiplier, one.deadline_ms) == ("second", WHOLE, 100)
    assert (one.currencies, one.features, one.source) == (("USD", "EUR"), {"tag": "a"}, "north")
    assert one.value_hint is None


def test_a_fixed_sale_has_a_price_and_no_floor() -> None:
    """It is taken or left at just this price."""
    one = made(FIXED)
    assert (one.floor, one.price, one.floor_currency) == (0, 2_000_000, "EUR")
    assert (one.auction, one.multiplier) == ("fixed", 3 * WHOLE)


def test_one_line_item_stands_alone_and_several_compete() -> None:
    """The first of the mapping is named first."""
    assert (made(SECOND).line_item, made(SECOND).line_items) == ("garden", ())
    several = made(SECOND, ("b", "a"))
    assert (several.line_item, several.line_items) == ("b", ("b", "a"))


@pytest.mark.parametrize(
    ("name", "kept"),
    [
        ("r", "r"),
        ("r" * 64, "r" * 64),
        ("a b~!", "a b~!"),
        ("r" * 65, None),
        ("Ärger", None),
        ("a\tb", None),
        ("a\n", None),
    ],
)
def test_a_name_that_does_not_fit_the_log_is_left_out_of_it(name: str, kept: str | None) -> None:
    """The seller still gets its own back, as the answer echoes the whole id."""
    assert made(SECOND, id=name).request_id == kept


@pytest.mark.parametrize(("said", "test"), [(0, False), (1, True)])
def test_a_test_stays_a_test(said: int, test: bool) -> None:
    """No money is set aside for it further in."""
    assert made(SECOND, test=said).test is test


@pytest.mark.parametrize(
    ("imp", "more", "found"),
    [
        ({"tagid": "a"}, {"device": {"devicetype": 4}}, {"device": "4", "tag": "a"}),
        ({"tagid": "a"}, {}, {"tag": "a"}),
        ({"tagid": ""}, {"device": {"devicetype": None}}, {}),
        ({"tagid": ["b", "c"]}, {"device": 7}, {"tag": "b"}),
    ],
)
def test_features_are_what_the_mapping_asks_and_the_request_says(
    imp: dict[str, Any], more: dict[str, Any], found: dict[str, Any]
) -> None:
    """What is missing is left out, for nothing is a feature of its own."""
    source = mapped()
    read = asked(request(imp, **more), source)
    assert features_of(source, read, read.imps[0]) == found
