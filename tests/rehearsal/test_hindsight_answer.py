"""One answer on a whole log: certain, bounded, assumed and drawn side by side, by hand."""

from __future__ import annotations

import json
import pickle
from typing import Any

import pytest
from hypothesis import given
from hypothesis import settings as limits
from hypothesis import strategies as some

from service.rehearsal.alternatives import Alternative, Kind
from service.rehearsal.auction_log import Logged
from service.rehearsal.hindsight_answer import Ask, answer, counted
from service.rehearsal.hindsight_assumed import Worth

RICH = 10**12
WORTH = Worth(ceiling=100, cap=100, typical=50)
LOG = [
    Logged("second", 50, "won", 80, 80, price=30),
    Logged("second", 50, "lost", 100),
    Logged("second", 20, "lost", 100, least=40),
    Logged("second", 0, "passed", 100, reason="frozen"),
    Logged("second", 50, "silent", 100),
    Logged("second", 50, "won", 100, 10, price=20),
]


def told(kind: Kind, price: int, left: int = RICH, daily: int | None = None) -> dict[str, Any]:
    """What the small log says of an alternative."""
    found: dict[str, Any] = answer(LOG, Ask(Alternative(kind, price, 100), WORTH, left, daily))
    return found


def test_a_log_is_counted_by_what_is_to_be_said_of_it() -> None:
    """Six lines: five auctions, one shut, one silent, one win still open."""
    assert counted(LOG) == {
        "auctions": 5,
        "passes_that_no_price_would_have_changed": 1,
        "bids_without_word": 1,
        "wins_whose_value_is_still_open": 1,
    }
    assert set(counted([]).values()) == {0}


def test_what_was_done_is_told_beside_what_might_have_been() -> None:
    """As it was: 50 for sure, -10 to 80 of the open one, -50 to 100 of the silent one."""
    as_it_was = told("flat", 10)["as_it_was"]
    assert as_it_was["auctions"] == 5
    assert as_it_was["surplus"] == {"low_nanos": 50 - 10 - 50, "high_nanos": 50 + 80 + 100}
    assert as_it_was["exact"]["of_which_value_still_open"] == 1
    assert as_it_was["spent"] == {"low_nanos": 50, "high_nanos": 100}


def test_a_price_below_all_rivals_wins_nothing_for_sure() -> None:
    """All but the silent auction are exact at a price of 10, and bring nothing."""
    found = told("flat", 10)["without_model"]
    assert (found["exact"]["auctions"], found["bounded"]["auctions"]) == (4, 1)
    assert found["exact"]["surplus_nanos"] == 0
    assert found["surplus"] == {"low_nanos": -10, "high_nanos": 100}


def test_a_price_above_a_told_one_wins_it_for_sure() -> None:
    """At 45 the third auction costs its told 40, and of its value nobody knows."""
    found = told("flat", 45)["without_model"]
    # Win 50; the bare loss stays lost; -40 to 60; silent -45 to 100; open -10 to 80.
    assert found["surplus"] == {"low_nanos": 50 - 40 - 45 - 10, "high_nanos": 50 + 60 + 100 + 80}
    assert found["wins"] == {"low": 3, "high": 4}


@pytest.mark.parametrize("kind", ["cap", "floor", "method"])
def test_what_is_not_one_price_has_no_line_of_rivals(kind: Kind) -> None:
    """Both the line and the drawn estimates are refused with their code."""
    found = told(kind, 40)
    assert found["assumed"][1]["code"] == "only_for_a_flat_price"
    assert found["drawn"][0]["code"] == "only_for_a_flat_price"
    assert found["assumed"][0]["label"] == "values_alike"


def test_bids_that_were_not_drawn_have_no_estimates() -> None:
    """It says so with a code and how many effective auctions there are."""
    (found,) = told("flat", 45)["drawn"]
    assert (found["code"], found["effective_auctions"]) == ("bids_not_drawn", 0.0)


@pytest.mark.parametrize(("left", "daily"), [(25, None), (RICH, 25)])
def test_money_that_may_end_takes_the_lines_away(left: int, daily: int | None) -> None:
    """With 25 in hand the first win at 30 may not have been there: each may also be nothing."""
    found = told("flat", 45, left, daily)
    assert found["budget"]["auctions_after_it_may_have_ended"] == 4
    assert [one["code"] for one in found["assumed"]] == ["budget_may_end"] * 2
    assert found["without_model"]["exact"]["surplus_nanos"] == 0
    assert found["without_model"]["wins"]["low"] == 0


def test_money_that_lasts_changes_nothing() -> None:
    """All that might be spent at 45 is 30, 40, 45 and 20: with 135 in hand it lasts for sure."""
    assert told("flat", 45, 135)["budget"]["auctions_after_it_may_have_ended"] == 0
    assert told("flat", 45, 134)["budget"]["auctions_after_it_may_have_ended"] > 0


def test_an_empty_log_is_answered() -> None:
    """Nothing was, so nothing is known, and no mean is made up."""
    found: dict[str, Any] = answer([], Ask(Alternative("flat", 5, 100), WORTH, RICH, None))
    assert found["without_model"]["exact"]["share"] is None
    assert found["without_model"]["surplus_per_auction"]["low_cpm_nanos"] is None
    assert found["assumed"][1]["code"] == "nothing_told"


@pytest.mark.parametrize(
    ("kind", "price"), [("flat", 45), ("cap", 40), ("floor", 25), ("method", 0), ("as_it_was", 0)]
)
def test_an_answer_goes_to_another_process_and_into_json(kind: Kind, price: int) -> None:
    """What is asked can be pickled, and what is answered has no number that JSON lacks."""
    ask = Ask(Alternative(kind, price, 100), WORTH, RICH, None)
    assert pickle.loads(pickle.dumps(ask)) == ask  # noqa: S301 - its own bytes.
    json.dumps(answer(LOG, ask), allow_nan=False)


amounts = some.integers(1, 100)


@limits(max_examples=40)
@given(
    rows=some.lists(some.tuples(amounts, amounts, amounts), min_size=1, max_size=10),
    price=amounts,
)
def test_the_bounds_hold_the_truth(rows: list[tuple[int, int, int]], price: int) -> None:
    """Whatever rivals and values are, what a flat price earns lies within what the log allows."""
    log, truth = [], 0
    for bid, rival, value in rows:
        if bid > rival:
            log.append(Logged("second", bid, "won", value, value, price=rival))
        else:
            log.append(Logged("second", bid, "lost", 100))
        truth += value - rival if price > rival else 0
    ask = Ask(Alternative("flat", price, 100), WORTH, RICH, None)
    found: Any = answer(log, ask)["without_model"]
    assert found["surplus"]["low_nanos"] <= truth <= found["surplus"]["high_nanos"]
    backwards: Any = answer(log[::-1], ask)["without_model"]
    assert backwards == found


@limits(max_examples=40)
@given(rows=some.lists(some.tuples(amounts, amounts), min_size=1, max_size=8), price=amounts)
def test_lines_under_assumptions_are_inside_the_bounds(
    rows: list[tuple[int, int]], price: int
) -> None:
    """What is assumed can only narrow what is certain."""
    log = [
        Logged("second", 50, "won", value, value, price=rival)
        if rival < 50
        else Logged("second", 50, "lost", 100, least=rival)
        for rival, value in rows
    ]
    found: Any = answer(log, Ask(Alternative("flat", price, 100), WORTH, RICH, None))
    outer = found["without_model"]["surplus"]
    for line in found["assumed"]:
        inner = line["surplus"]
        assert outer["low_nanos"] <= inner["low_nanos"] <= inner["high_nanos"]
        assert inner["high_nanos"] <= outer["high_nanos"]
