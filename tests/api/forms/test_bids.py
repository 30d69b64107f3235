"""Opportunities are read one by one, and what is not used of them is named."""

from __future__ import annotations

import json
from collections.abc import Sequence
from decimal import Decimal
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.api.body import parse_object
from service.api.forms.bids import by_form, read_batch, read_bid, usual
from service.api.forms.features import features
from service.api.forms.fields import ID
from service.decision.opportunity import Opportunity
from service.errors import Malformed, Refusal
from tests.api.anything import ANYTHING


def test_an_opportunity_is_read_with_its_floor_rounded_up() -> None:
    """A floor between two nanos becomes the higher one, so that no bid lies below it."""
    opportunity, unused = read_bid(
        {
            "request_id": "op 81f2",
            "line_item": "alpine-season-pass",
            "floor_cpm": Decimal("0.4000001"),
            "features": {"device": "phone", "hour": 13, "share": Decimal("0.5"), "gone": None},
            "deadline_ms": 80,
        }
    )
    assert opportunity == Opportunity(
        line_item="alpine-season-pass",
        request_id="op 81f2",
        floor=400_001,
        features={"device": "phone", "hour": 13, "share": 0.5},
        deadline_ms=80,
    )
    assert unused == set()


def test_what_is_not_used_as_sent_is_named() -> None:
    """Unknown fields, and a floor below zero are warnings, not refusals."""
    opportunity, unused = read_bid(
        {"line_item": "a", "floor_cpm": -1, "shiny": 1, "<b>": 2, "x" * 65: 3}
    )
    assert opportunity.floor == 0
    assert unused == {"floor_cpm", "shiny", "(no plain word)"}


@pytest.mark.parametrize(
    ("wish", "field"),
    [
        ({}, "line_item"),
        ({"line_item": None}, "line_item"),
        ({"line_item": "a", "line_items": ["b"]}, "line_items"),
        ({"line_items": ["a", "a"]}, "line_items"),
        ({"line_items": []}, "line_items"),
        ({"line_items": [str(i) for i in range(21)]}, "line_items"),
        ({"line_item": "a", "auction": "dutch"}, "auction"),
        ({"line_item": "a", "price_cpm": 0}, "price_cpm"),
    ],
)
def test_a_bid_names_one_line_item_or_several_that_compete(
    wish: dict[str, Any], field: str
) -> None:
    """Never both, nor the same one twice; and an auction and a price are of their form."""
    with pytest.raises(Malformed) as caught:
        read_bid(wish)
    assert caught.value.data == {"field": field}


def test_several_line_items_an_auction_and_a_price_are_read() -> None:
    """A price beside an auction that has none is named as not used."""
    opportunity, unused = read_bid({"line_items": ["b", "a"], "auction": "fixed", "price_cpm": 2})
    assert (opportunity.line_item, opportunity.line_items) == ("b", ("b", "a"))
    assert (opportunity.auction, opportunity.price, unused) == ("fixed", 2_000_000, set())
    assert read_bid({"line_item": "a", "auction": "first", "price_cpm": 2})[1] == {"price_cpm"}


def test_a_bad_row_stays_in_its_place_of_a_batch() -> None:
    """Good rows get the one deadline of the call; a bad row becomes its refusal."""
    rows, unused = read_batch(
        {
            "opportunities": [
                {"line_item": "a", "deadline_ms": 5},
                7,
                {"line_item": "a", "line_items": ["b"]},
                {"line_item": True},
                {"line_item": "b", "shiny": 1},
            ],
            "deadline_ms": 80,
        },
        rows_max=5,
    )
    kinds = [row.code if isinstance(row, Refusal) else row.deadline_ms for row in rows]
    assert kinds == [80, "bad_field", "bad_field", "bad_field", 80]
    assert unused == {"shiny"}


@pytest.mark.parametrize("rows", [[], [{}] * 6, {}, None])
def test_a_batch_of_none_or_of_too_many_is_refused(rows: object) -> None:
    """The limit is the one of the settings."""
    with pytest.raises(Malformed):
        read_batch({"opportunities": rows}, rows_max=5)


FIELDS = st.sampled_from(["line_item", "floor_cpm", "features", "deadline_ms", "source", "test"])


@given(st.dictionaries(FIELDS | st.text(), ANYTHING, max_size=6))
def test_no_opportunity_fails_otherwise_than_by_a_refusal(members: dict[str, object]) -> None:
    """Whatever stands in the fields, the form is filled in or refused."""
    try:
        opportunity, _ = read_bid(members)
    except Refusal:
        return
    assert ID.fullmatch(opportunity.line_item)


def mostly(*sound: object, odd: Sequence[object]) -> st.SearchStrategy[object]:
    """Sound more often than odd, or hardly any opportunity would be sound as a whole."""
    return st.sampled_from([*sound] * 5 + [*odd])


WORDS = ["x" * 65, "", "\u00e9", "a\n", "tab\t", None, True, 7]
CENTS = st.decimals(-1, 10**10, allow_nan=False, places=7)
SAID: st.SearchStrategy[dict[str, object]] = st.fixed_dictionaries(
    {"line_item": mostly("a", "garden-1.B_2", odd=["a b", *WORDS])},
    optional={
        "request_id": mostly("op 1", "~", None, odd=WORDS),
        "source": mostly("north-exchange", "a b", odd=WORDS),
        "auction": mostly("first", "second", None, odd=["fixed", "third", 1, []]),
        "floor_cpm": CENTS | mostly(0, 1, "0.4", None, odd=[-1, "1e3", True, [], Decimal("1e60")]),
        "features": mostly(
            None, {"hour": 13, "at": "lake", "gone": None}, {}, odd=[[], {"a": []}, {"a" * 65: 1}]
        )
        | st.dictionaries(st.text(max_size=3), ANYTHING, max_size=3),
        "value_hint": mostly(None, 0, "0.002", Decimal("0.5"), odd=["-0.1", -1, 10**30, True]),
        "deadline_ms": mostly(None, 0, 80, 60_000, odd=[60_001, -1, True, Decimal(5), "5"]),
        "test": mostly(True, False, odd=[None, 0, "true"]),
        "price_cpm": st.sampled_from([None, 1]),
        "line_items": st.sampled_from([None, ["b"], []]),
        "shiny": st.just(1),
    },
)


@settings(max_examples=600)
@given(SAID, st.sampled_from([None, 40]))
def test_what_nearly_all_say_is_read_as_its_form_reads_it(
    members: dict[str, object], batch_ms: int | None
) -> None:
    """The quick way takes neither more nor less than it should, and reads it alike."""
    found = usual(members, batch_ms)
    try:
        opportunity, unused = by_form(members, batch_ms)
    except Refusal:
        assert found is None
        return
    more = {"price_cpm", "line_items", "shiny"} & members.keys() or opportunity.auction == "fixed"
    assert found == (None if more or unused else opportunity)


def test_what_nearly_all_say_goes_the_quick_way() -> None:
    """The example of the contract does, with features and a hint too."""
    said: dict[str, object] = {"line_item": "a", "request_id": "op-81f2", "source": "north"}
    said |= {"auction": "second", "floor_cpm": Decimal("0.4"), "features": {"hour": 13}}
    said |= {"value_hint": "0.002", "deadline_ms": 80, "test": False}
    assert usual(said) == by_form(said)[0]
    assert usual({"line_item": "a"}) == Opportunity("a")


@given(ANYTHING)
def test_no_features_fail_otherwise_than_by_a_value_error(members: object) -> None:
    """What passes is text, finite numbers and truth values, ready for JSON without NaN."""
    try:
        read = features(members)
    except ValueError:
        return
    assert len(json.dumps(read, allow_nan=False)) > 1


def test_numbers_of_a_body_reach_the_form_exactly() -> None:
    """No float stands between the text of a price and its nanos."""
    opportunity, _ = read_bid(
        parse_object(b'{"line_item": "a", "floor_cpm": 1.000000000000000001}')
    )
    assert opportunity.floor == 1_000_001
