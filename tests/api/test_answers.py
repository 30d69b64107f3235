"""Answers hold decimal text, CPM numbers and times in UTC, and no unit of ours."""

from __future__ import annotations

import json
from decimal import Decimal

from service.api import answers
from service.api.forms.configs import read_new
from service.bidding import Answer
from service.errors import Malformed
from service.feedback import Receipt
from service.operating import View

FORM: dict[str, object] = {
    "id": "alpine-season-pass",
    "name": "Season pass, alpine garden",
    "currency": "EUR",
    "budget": "500.00",
    "daily_budget": "60.00",
    "bid_cap_cpm": 8,
    "flight": {"starts_at": "2026-12-01T00:00:00Z", "ends_at": None, "time_zone": "UTC"},
    "grace_s": 900,
    "value": {"ceiling": "50.00", "expected": {"per_impression": "0.002", "conversions": 1}},
    "policy": {"method": "flat", "price_cpm": 2},
}


def test_a_bid_is_a_number_of_at_most_six_decimals() -> None:
    """The smallest and a long price are written exactly."""
    for price, text in ((1, "1e-06"), (1_234_567, "1.234567"), (8_000_000, "8.0")):
        answer = answers.bid(Answer("op-1", "a", price, None, "t", "r", "mean", "value", 3))
        assert json.dumps(answer["bid_cpm"]) == text
        assert answer["pass"] is None


def test_a_pass_has_a_reason_and_no_price() -> None:
    """Bid, ticket and ref are null on a pass."""
    answer = answers.bid(Answer(None, "a", None, "frozen"))
    assert (answer["bid_cpm"], answer["ticket"], answer["ref"]) == (None, None, None)
    assert answer["pass"] == "frozen"


def test_a_bad_row_names_its_code() -> None:
    """The place of a bad row holds an error object."""
    row = answers.bad_row(Malformed("bad_field", "Sentence.", {"field": "line_item"}))
    assert row == {"error": {"code": "bad_field", "detail": "Sentence.", "field": "line_item"}}


def test_a_receipt_says_only_what_there_is_to_say() -> None:
    """Ref and status always; code, clipped and test when they matter."""
    assert answers.receipt(Receipt("r", "recorded")) == {"ref": "r", "status": "recorded"}
    assert answers.receipt(Receipt("r", "recorded", clipped=True, test=True)) == {
        "ref": "r",
        "status": "recorded",
        "clipped": True,
        "test": True,
    }


def test_a_share_of_traffic_is_no_fee() -> None:
    """Names that two objects share are written as each one's own."""
    control = {"share": Decimal("0.1"), "method": "flat", "price_cpm": 3}
    fees = {"share": "0.12", "cpm": "0.15"}
    config, _ = read_new({**FORM, "control": control, "fees": fees}, 0)
    read = answers.line_item(View("a", 1, config, 0, 0, [], "words", []))
    assert read["control"] == {"share": 0.1, "method": "flat", "price_cpm": 3.0}
    assert read["fees"] == fees


def test_a_line_item_comes_back_in_the_form_in_which_it_was_created() -> None:
    """Every field that was given is answered as it was given, in the caller's units."""
    config, _ = read_new(FORM, 0)
    view = View("alpine-season-pass", 1, config, 1000, 1001, [], "words", ["value.typical"])
    answer = answers.line_item(view, ["grace_s"])
    assert {name: answer[name] for name in ("budget", "daily_budget", "flight", "grace_s")} == {
        name: FORM[name] for name in ("budget", "daily_budget", "flight", "grace_s")
    }
    assert answer["bid_cap_cpm"] == 8.0
    assert answer["policy"] == {"method": "flat", "price_cpm": 2.0}
    assert answer["value"]["expected"] == {"per_impression": "0.002", "conversions": 1}
    assert answer["updated_at"] == "1970-01-01T00:00:01.001Z"
    assert answer["defaults"] == ["grace_s", "value.typical"]


def test_no_key_of_ours_is_left_in_an_answer() -> None:
    """Nanos become text, CPM nanos numbers, moments times, and infinities null, at any depth."""
    state = {
        "spent_nanos": 1,
        "bid": {"price_cpm_nanos": 1_500_000, "high_nanos": None},
        "rows": ({"at_ms": 0}, {"by_ms": None}),
        "feed": {"last_ms": {"won": 1000}},
        "rate": float("inf"),
        "on": True,
    }
    assert answers.plain(state) == {
        "spent": "0.000000001",
        "bid": {"price_cpm": 1.5, "high": None},
        "rows": [{"at": "1970-01-01T00:00:00Z"}, {"by": None}],
        "feed": {"last": {"won": "1970-01-01T00:00:01Z"}},
        "rate": None,
        "on": True,
    }
