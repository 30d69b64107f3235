"""How charts count, without a database: bins of prices, quantiles, steps of a clock."""

from __future__ import annotations

import math
from collections import Counter
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.store import charting
from service.store.charting import FIVE_MINUTES_MS, Quantiles
from tests.store.test_decisions import BID, PASS

PRICES = st.integers(1, 10**15)


@pytest.mark.parametrize(
    ("price", "at"), [(0, "-1"), (-5, "-1"), (1, "0"), (2, "4"), (3, "6"), (4, "8"), (1024, "40")]
)
def test_a_price_falls_into_a_quarter_of_a_doubling(price: int, at: str) -> None:
    """Four times its binary logarithm, cut; what has none has a bin of its own."""
    assert charting._bin(price) == at


@settings(max_examples=80)
@given(price=PRICES)
def test_the_middle_of_a_bin_is_within_nine_percent(price: int) -> None:
    """An eighth of a doubling is 9.05 %; a whole nano is rounded to besides."""
    found = charting._quantiles(Counter({int(charting._bin(price)): 1}))
    assert found is not None
    assert abs(found.median - price) <= 0.0906 * price + 0.5


@settings(max_examples=60)
@given(prices=st.lists(st.integers(0, 10**9), min_size=1, max_size=40))
def test_quantiles_are_those_of_the_sorted_prices(prices: list[int]) -> None:
    """The smallest price that so large a share does not exceed, as its bin tells it."""
    found = charting._quantiles(Counter(int(charting._bin(price)) for price in prices))
    assert found is not None
    ranked = sorted(prices)
    for told, share in ((found.low, 0.1), (found.median, 0.5), (found.high, 0.9)):
        true = ranked[max(1, math.ceil(share * len(ranked))) - 1]
        assert abs(told - true) <= 0.0906 * true + 0.5
    assert found.low <= found.median <= found.high
    assert found.count == len(prices)


def test_no_price_has_no_quantile() -> None:
    """Nothing is not nought; a price of nought is."""
    assert charting._quantiles(Counter()) is None
    assert charting._quantiles(Counter({charting.NOTHING_BIN: 3})) == Quantiles(0, 0, 0, 3)


@settings(max_examples=80)
@given(span_ms=st.integers(0, 3 * 10**11), most=st.integers(1, 400), from_ms=st.integers(0, 10**12))
def test_a_span_never_needs_more_steps_than_allowed(span_ms: int, most: int, from_ms: int) -> None:
    """Though it begins inside of its first step; a step is one of a clock or whole days."""
    step_ms = charting._step_ms(span_ms, most)
    steps = -(-(from_ms % step_ms + span_ms) // step_ms)
    assert steps <= max(most, 2)
    assert step_ms in charting.STEPS_MS or step_ms % charting.STEPS_MS[-1] == 0


def test_decisions_are_counted_by_place_and_word() -> None:
    """Bids by bin and setter, passes by reason; a bid that nothing set has an empty word."""
    at_ms = 7 * FIVE_MINUTES_MS
    rows = [
        {**BID, "at_ms": at_ms, "price": 1024},
        {**BID, "at_ms": at_ms + FIVE_MINUTES_MS - 1, "price": 1025, "set_by": None},
        {**PASS, "at_ms": at_ms + FIVE_MINUTES_MS},
        {**BID, "at_ms": at_ms, "price": 5, "test": 1},
        {**BID, "at_ms": at_ms, "price": 0, "line_item": "b"},
    ]
    assert charting.of_decisions(rows) == {
        ("a", at_ms, "bid", "40"): (2, 2049),
        ("a", at_ms, "set_by", "value"): (1, 0),
        ("a", at_ms, "set_by", ""): (1, 0),
        ("a", at_ms + FIVE_MINUTES_MS, "pass", "frozen"): (1, 0),
        ("b", at_ms, "bid", "-1"): (1, 0),
        ("b", at_ms, "set_by", "value"): (1, 0),
    }
    assert charting.of_decisions([]) == {}


def entry(kind: str, body: str, cost: int = 0, service_ms: int = 0) -> tuple[object, ...]:
    """A row of a stream in its first five minutes."""
    return 1, kind, 4, service_ms, cost, body


@pytest.mark.parametrize(
    ("row", "counted"),
    [
        (entry("won", '{"price": 1024}', 900), {("cost", ""): (1, 900), ("won", "40"): (1, 1024)}),
        (entry("won", '{"price": "x"}'), {("won", "-1"): (1, 0)}),
        (entry("won", "{"), {("won", "-1"): (1, 0)}),
        (entry("lost", "[]"), {("lost", ""): (1, 0)}),
        (entry("billed", "{}", 5), {("cost", ""): (1, 5), ("billed", ""): (1, 0)}),
        (entry("reversal", "{}", 5), {("cost", ""): (1, -5)}),
        (entry("tick", "{}"), {}),
        (entry("value", '{"amount": 9}'), {("value", ""): (1, 9)}),
        (entry("value", '{"amount": 4, "was": 9}'), {("value", ""): (0, -5)}),
        (entry("value", '{"amount": "much"}'), {}),
        (entry("value", '{"amount": 9, "won_ms": 0}', 0, 1024),
         {("value", ""): (1, 9), ("delay", "10"): (1, 0)}),
        (entry("value", '{"amount": 9, "won_ms": 5}', 0, 5),
         {("value", ""): (1, 9), ("delay", "0"): (1, 0)}),
        (entry("value", '{"amount": 0, "won_ms": 0}', 0, 99), {("value", ""): (1, 0)}),
        (entry("value", '{"amount": 9, "won_ms": 0, "parked": true}', 0, 9),
         {("value", ""): (1, 9)}),
    ],
)  # fmt: skip
def test_an_entry_is_counted_for_what_can_be_read_of_it(
    row: Any, counted: dict[tuple[str, str], tuple[int, int]]
) -> None:
    """Costs less refunds, outcomes by kind, values with corrections, delays of first values."""
    found = charting._of_entries("a", [row])
    assert {key[2:]: sums for key, sums in found.items()} == counted
    assert {key[:2] for key in found} <= {("a", 0)}
