"""Rows as people read them: names with units, what is held, what is taught, by kind of entry."""

from __future__ import annotations

import json
from types import SimpleNamespace
from typing import Any

import pytest

from service.guard.ticket import ref_of
from service.ledger.cancelling import PARTS, Cancelled
from service.recounting import (
    KINDS,
    LESSON_KINDS,
    MONEY_KINDS,
    decision_row,
    entry_row,
    journal_row,
    lesson_row,
    money_row,
    said,
)

BID = bytes(range(16))
CEILING = 1000


def row(kind: str, body: object = None, slot: str | None = None, **more: Any) -> SimpleNamespace:
    """A row as the store gives it."""
    told = body if isinstance(body, str) else json.dumps(body or {})
    plain = {"seq": 7, "kind": kind, "body": told, "at_ms": 99, "bid": BID, "slot": slot}
    return SimpleNamespace(**plain | {"cost": 5} | more)


@pytest.mark.parametrize(
    ("text", "members"),
    [
        ("{}", {}),
        ('{"a": 1}', {"a": 1}),
        ("", {}),
        ("{", {}),
        ("[1]", {}),
        ("7", {}),
        ("null", {}),
    ],
)
def test_a_damaged_body_says_nothing(text: str, members: dict[str, Any]) -> None:
    """The audit says that it is damaged; a page that shows it must not fail."""
    assert said(text) == members


def test_an_entry_is_told_in_our_words() -> None:
    """Members that are money end in their unit, those inside others too; the rest is as it is."""
    body = {
        **{"price": 1, "to_win": 2, "bid": 3, "hint": 4, "ends_ms": 5, "won_ms": 6, "at": "x"},
        **{"owed": 7, "source": "north", "value": {"amount": 8, "typical": 9, "arrival": "once"}},
    }
    told = entry_row(row("won", body, "result"))
    assert told["says"] == {
        **{"clearing_cpm_nanos": 1, "to_win_cpm_nanos": 2, "bid_cpm_nanos": 3},
        **{"value_hint_nanos": 4, "flight_ends_ms": 5, "won_service_ms": 6, "happened_at": "x"},
        **{"owed_nanos": 7, "source": "north"},
        "value": {"amount_nanos": 8, "typical_nanos": 9, "arrival": "once"},
    }
    assert (told["seq"], told["kind"], told["at_ms"], told["slot"]) == (7, "won", 99, "result")
    assert (told["ref"], told["cost_nanos"]) == (ref_of(BID), 5)


def test_the_amount_of_a_value_is_called_its_value() -> None:
    """That of a lease is money that was set aside, and is called otherwise."""
    assert entry_row(row("value", {"amount": 3}))["says"] == {"value_nanos": 3}
    assert entry_row(row("lease", {"amount": 3}))["says"] == {"amount_nanos": 3}


def test_an_entry_without_a_bid_has_no_ref() -> None:
    """A freeze or an edit is of no single bid."""
    assert entry_row(row("edit", bid=None))["ref"] is None


@pytest.mark.parametrize(
    ("kind", "slot", "body", "held"),
    [
        ("lease", None, {"amount": 40}, 40),
        ("lease", None, {}, 0),
        ("retire", None, {"freed": 40}, -40),
        ("close", None, {"released": 30, "unbilled": 4}, -34),
        ("won", "result", {"bid": 9, "owed": 0}, -9),
        ("won", "result", {"bid": 9, "owed": 6}, -3),
        ("won", "result", {"bid": 9, "late": True}, 0),
        ("lost", "result", {"bid": 9}, -9),
        ("void", "result", {"bid": 9}, -9),
        ("void", "void", {"bid": 9}, None),
        ("billed", "billed", {"price": 5}, None),
        ("value", "value:e", {"amount": 5}, 0),
        ("create", None, {"budget": 5}, 0),
        ("lease", None, {"amount": "40"}, 0),
        ("lease", None, "damaged", 0),
    ],
)
def test_what_an_entry_does_to_what_is_held(
    kind: str, slot: str | None, body: object, held: int | None
) -> None:
    """In nanos; null where the entry alone does not say, and nothing is guessed."""
    assert money_row(row(kind, body, slot))["held_nanos"] == held


@pytest.mark.parametrize(
    ("kind", "body", "taught"),
    [
        (
            "won",
            {"round": 1, "source": "north", "price": 5, "to_win": 4},
            {
                **{"rounds": 1, "source": "north", "clearing_cpm_nanos": 5},
                **{"to_win_cpm_nanos": 4, "impressions": 1},
            },
        ),
        (
            "lost",
            {"round": 1, "source": "north", "to_win": 9, "price": 5},
            {
                **{"rounds": 1, "source": "north"},
                **{"clearing_cpm_nanos": None, "to_win_cpm_nanos": 9},
            },
        ),
        ("tick", {"rounds": 12, "under_floor": 7}, {"rounds": 12, "under_floor": 7}),
        ("retire", {"rounds": 3}, {"rounds": 3, "under_floor": 0}),
        (
            "value",
            {"amount": 400, "was": None},
            {"value_nanos": 400, "clipped": False, "instead_of_nanos": None},
        ),
        (
            "value",
            {"amount": CEILING, "was": 3},
            {"value_nanos": CEILING, "clipped": False, "instead_of_nanos": 3},
        ),
        (
            "value",
            {"amount": CEILING + 1, "was": 3},
            {"value_nanos": CEILING, "clipped": True, "instead_of_nanos": 3},
        ),
        ("reset", {}, {"forgets": "all before it"}),
        (
            "prior",
            {"per_impression": 3, "typical": 4},
            {"per_impression_nanos": 3, "typical_nanos": 4},
        ),
        ("lease", {"amount": 3}, {}),
    ],
)
def test_what_an_entry_teaches(kind: str, body: dict[str, Any], taught: dict[str, Any]) -> None:
    """Of the market, of the value, or nothing; a value is cut at the ceiling and says so."""
    told = lesson_row(row(kind, body), body, Cancelled([]), CEILING)
    assert told["taught"] == taught
    assert (told["teaches"], told["cancelled"]) == (sorted(PARTS.get(kind, ())), [])


@pytest.mark.parametrize("kind", sorted(PARTS))
def test_what_is_cancelled_whole_teaches_nothing(kind: str) -> None:
    """Every part it had is named as cancelled, so that a person sees what went."""
    told = lesson_row(row(kind, {"amount": 3, "round": 1}), None, Cancelled([]), CEILING)
    assert (told["teaches"], told["taught"]) == ([], {})
    assert told["cancelled"] == sorted(PARTS[kind])


@pytest.mark.parametrize(
    ("price", "reason", "test"), [(5, None, 0), (None, "no_value", 1), (None, "paused", 0)]
)
def test_a_decision_is_a_bid_or_a_pass(price: int | None, reason: str | None, test: int) -> None:
    """Prices per impression in nanos, and a test as a truth value."""
    plain = {"number": 1, "at_ms": 2, "request_id": "r", "ref": "x", "source": "n", "floor": 3}
    told = decision_row(
        SimpleNamespace(**plain, price=price, reason=reason, set_by="cap", snapshot=4, test=test)
    )
    assert (told["bid_cpm_nanos"], told["pass"], told["test"]) == (price, reason, bool(test))
    assert (told["floor_cpm_nanos"], told["snapshot"], told["set_by"]) == (3, 4, "cap")
    assert {"price", "reason", "floor"} & set(told) == set()


@pytest.mark.parametrize(("line_item", "shown"), [("garden", "garden"), ("*", None)])
def test_what_concerns_all_line_items_names_none(line_item: str, shown: str | None) -> None:
    """The star is our own word for it and leaves no page."""
    plain = {"number": 1, "at_ms": 2, "actor": "a", "action": "freeze", "reason": "r"}
    told = journal_row(SimpleNamespace(**plain, line_item=line_item, detail='{"x": 1}'))
    assert (told["line_item"], told["detail"]) == (shown, {"x": 1})


def test_kinds_of_money_and_of_lessons_are_kinds() -> None:
    """Each once, so that a filter by kind offers no two doors to one room."""
    assert len(set(KINDS)) == len(KINDS)
    assert set(MONEY_KINDS) <= set(KINDS)
    assert set(LESSON_KINDS) <= set(KINDS)
