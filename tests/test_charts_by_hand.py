"""Charts and stakes at their edges: units in every head, words for what is missing, zones."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service import drawing
from service.drawing import ROWS_MAX
from service.estimates import Estimate
from service.judging import HOUR_MS, alarm, found, judge, planned_at
from service.store.watching import Overview, Standing
from service.store.watching_series import Series
from tests.builders import UNIT, line_item

NOON_MS = 1_764_586_800_000  # 2025-12-01T11:00:00Z, noon in Zurich.
DAY_MS = 24 * HOUR_MS
MIDNIGHT_MS = NOON_MS - 12 * HOUR_MS
EMPTY = Series(NOON_MS, [], 0, 0, [], [], 0, [], 0, None)
DAILY = line_item(daily_budget=24 * UNIT)


@pytest.mark.parametrize(
    ("span_ms", "words"),
    [
        (0, "0 ms"),
        (999, "999 ms"),
        (1000, "1 s"),
        (59_999, "60 s"),
        (60_000, "1 min"),
        (90_000, "1.5 min"),
        (3_600_000, "1 h"),
        (86_400_000, "1 d"),
        (10 * 86_400_000, "10 d"),
    ],
)
def test_a_span_has_the_largest_unit_that_leaves_one(span_ms: int, words: str) -> None:
    """From milliseconds to days, in three figures."""
    assert drawing._span(span_ms) == words


@pytest.mark.parametrize(
    ("counts", "within"),
    [((1, 0, 0), "2 ms"), ((1, 2, 1), "4 ms"), ((0, 0, 5), "8 ms"), ((3, 3, 0), "2 ms")],
)
def test_half_of_the_values_have_come_within_a_bin(counts: tuple[int, ...], within: str) -> None:
    """The end of the bin where the sum reaches the half, and empty bins have no row."""
    told = [(2**n, 2 ** (n + 1), count) for n, count in enumerate(counts)]
    chart = drawing.delays(replace(EMPTY, delays=told))
    assert chart.says.endswith(f"half of them within {within}.")
    assert len(chart.rows) == sum(count > 0 for count in counts)
    assert chart.columns == ("Delay", "Values (count)")


@given(some.integers(1, 200))
@settings(max_examples=40, deadline=None)
def test_a_thinned_table_keeps_its_ends_and_its_order(count: int) -> None:
    """Never longer than a glance, and never a row twice."""
    rows = [(f"{n:04d}",) for n in range(count)]
    kept = drawing._thinned(rows)
    assert (kept[0], kept[-1], len(kept)) == (rows[0], rows[-1], min(count, ROWS_MAX))
    assert list(kept) == sorted(set(kept))


@pytest.mark.parametrize("currency", ["EUR", "JPY"])
def test_every_chart_names_its_currency_and_its_zone(currency: str) -> None:
    """In the heads of its columns, where a number without a unit would be no number."""
    config = line_item(currency=currency, daily_budget=None, flight={"time_zone": "Asia/Tokyo"})
    charts = drawing.charts(config, EMPTY, [], {"sources": []}, 0)
    heads = {one.id: one.columns for one in charts}
    assert heads["spend"] == ("Time (Asia/Tokyo)", f"Spent ({currency})", f"Plan ({currency})")
    assert heads["prices"][1:] == (f"Mean bid ({currency} CPM)", f"Mean price ({currency} CPM)")
    assert heads["wins"][0] == f"Price ({currency} CPM)"
    assert all(f"({currency} CPM)" in head for head in heads["value"][1:])


def test_an_unknown_mean_is_a_word_and_a_gap() -> None:
    """Not nought, which would be a value."""
    chart = drawing.value(DAILY, [Estimate(NOON_MS, None, 0, 5_000_000)])
    assert chart.says == "Now none EUR CPM, between 0 and 5."
    assert chart.figure["data"][2]["y"] == [None]
    assert chart.rows[0][1] == "none"


def test_a_source_without_a_name_is_called_so() -> None:
    """Its auctions are grouped by thousands."""
    source = {"source": "", "auction": "first", "auctions": 12_345.0, "says": None, "prices": []}
    chart = drawing.wins(DAILY, {"sources": [source]})
    assert chart.says == (
        "Source sources without a name of their own, first-price auctions, 12,345 auctions. "
    )


@pytest.mark.parametrize(
    ("hours", "created_h", "due"), [(0, 0, 0), (6, 0, 6), (12, 0, 12), (12, 6, 8), (6, 6, 0)]
)
def test_the_plan_is_spread_from_when_the_line_item_began_that_day(
    hours: int, created_h: int, due: int
) -> None:
    """Twenty-four units over the hours left: from six o'clock twelve is a third of the day."""
    config = line_item(daily_budget=24 * UNIT)
    at_ms = MIDNIGHT_MS + hours * HOUR_MS
    assert planned_at(config, MIDNIGHT_MS + created_h * HOUR_MS, at_ms) == due * UNIT


def test_a_day_of_twenty_three_hours_is_spread_over_all_of_them() -> None:
    """On 29 March 2026 Zurich has no hour from two to three; noon is the eleventh."""
    midnight_ms = 1_774_738_800_000  # 2026-03-28T23:00:00Z, midnight in Zurich.
    config = line_item(daily_budget=23 * UNIT)
    assert planned_at(config, 0, midnight_ms + 11 * HOUR_MS) == 11 * UNIT


def standing(name: str, *, waiting: int = 0, **config: Any) -> Standing:
    """A line item that has spent nothing, with as many outcomes set aside."""
    balance = {"budget": UNIT, "target": UNIT, "spent": 0, "held": 0, "unfunded": 0}
    made = Standing(
        name, line_item(id=name, **config), 0, {**balance, "disputed": 0}, False, False, None
    )
    return replace(made, waiting=waiting)


def test_nobody_is_judged_of_nothing() -> None:
    """An empty overview has no rows, no alarm and no stakes."""
    rows = judge(Overview(NOON_MS, [], []))
    told = alarm(rows)
    assert (rows, told.total, told.needing, told.stopped_by_people, told.stakes) == (
        [],
        0,
        0,
        0,
        {},
    )


def test_a_line_item_without_a_day_has_no_speed_and_no_plan() -> None:
    """And no end of its money is foretold."""
    (one,) = judge(Overview(NOON_MS, [standing("a")], []))
    assert (one.status, one.speed, one.at_risk, one.ends_ms) == ("bids", 0, 0, None)
    assert (one.planned, one.spent_today, one.id) == (None, 0, "a")


def test_outcomes_set_aside_are_counted_in_words() -> None:
    """The number stands in the sentence."""
    (one,) = judge(Overview(NOON_MS, [standing("a", waiting=3)], []))
    assert one.why == ("3 outcomes are set aside in quarantine",)


@pytest.mark.parametrize("order", [1, -1])
def test_the_order_of_an_overview_does_not_matter(order: int) -> None:
    """Equal in all else they stand by their ids, those that call before."""
    several = [standing("b"), standing("c", waiting=1), standing("a")][::order]
    rows = judge(Overview(NOON_MS, several, []))
    assert [one.id for one in rows] == ["c", "a", "b"]
    assert [one.id for one in found(rows, " ")] == ["c", "a", "b"]
    assert found(rows, "c bids invented") == rows[:1]
