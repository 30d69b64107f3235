"""Charts as data: what they say, what their tables hold, and that JSON can carry them."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import Any

import pytest

from service import drawing
from service.drawing import ROWS_MAX, Chart
from service.estimates import Estimate
from service.store.watching_series import Series
from tests.builders import UNIT, line_item

NOON_MS = 1_764_586_800_000  # 2025-12-01T11:00:00Z, noon in Zurich.
HOUR_MS = 3_600_000
CONFIG = line_item(daily_budget=24 * UNIT)
NOTHING = Series(NOON_MS, [], 0, 0, [], [], 0, [], 0, None)
NO_CURVE: dict[str, Any] = {"sources": []}
CHANCE = {"estimate": 0.5, "low": 0.4, "high": 0.6}
CURVE: dict[str, Any] = {
    "sources": [
        {"source": "small", "auction": "second", "auctions": 3.0, "says": None, "prices": []},
        {
            **{"source": "north", "auction": "second", "auctions": 900.0, "says": "no more"},
            "prices": [
                {"price_cpm_nanos": 1_000_000, "win_probability": CHANCE},
                {"price_cpm_nanos": 2_000_000, "win_probability": dict.fromkeys(CHANCE)},
            ],
        },
    ]
}


def some() -> Series:
    """A morning: bids every minute, a win each hour for one unit, values after a second or two."""
    bids = [(NOON_MS - n * 60_000, 2_000_000 + n) for n in range(600, 0, -1)]
    costs = [(NOON_MS - n * HOUR_MS, UNIT) for n in range(6, 0, -1)]
    wins = [(at, 1_000_000) for at, _ in costs]
    delays = [(512, 1024, 1), (1024, 2048, 3)]
    return Series(NOON_MS, bids, 600, 30, costs, wins, 6, delays, 8 * UNIT, None)


def drawn(series: Series, known: list[Estimate], curve: dict[str, Any]) -> dict[str, Chart]:
    """All five, by name."""
    return {one.id: one for one in drawing.charts(CONFIG, series, known, curve, 0)}


def test_with_nothing_known_every_chart_says_so() -> None:
    """No figure is drawn of nothing, and no sentence is empty."""
    found = drawn(NOTHING, [], NO_CURVE)
    assert list(found) == ["spend", "prices", "value", "wins", "delays"]
    assert all(one.says for one in found.values())
    assert [name for name, one in found.items() if one.figure] == ["spend"]


def test_every_figure_is_json_without_nan() -> None:
    """Gaps are null, and tables are never longer than a glance."""
    known = [Estimate(NOON_MS - 1000, None, 0, UNIT), Estimate(NOON_MS, 4_000_000, 1, UNIT)]
    for one in drawn(some(), known, CURVE).values():
        assert json.dumps(one.figure, allow_nan=False)
        assert 0 < len(one.rows) <= ROWS_MAX
        assert {len(row) for row in one.rows} == {len(one.columns)}


def test_spend_grows_to_what_the_day_has_cost() -> None:
    """What was booked before these rows is counted from the start; half the plan is due by noon."""
    spend = drawn(some(), [], NO_CURVE)["spend"]
    heights = spend.figure["data"][0]["y"]
    assert (heights[0], heights[-1]) == (2.0, 8.0)
    assert heights == sorted(heights)
    assert spend.says == "Spent today: 8.00 EUR; by plan it would be 12.00 EUR."
    plan = spend.figure["data"][1]["y"]
    assert plan[0] == 0.0
    assert plan[-1] == pytest.approx(24.0, abs=0.01)


def test_without_a_daily_budget_there_is_no_plan() -> None:
    """One line, and words that say why."""
    chart = drawing.spend(line_item(daily_budget=None), some(), 0)
    assert len(chart.figure["data"]) == 1
    assert "no daily budget" in chart.says


def test_bids_and_prices_are_shown_as_cpm_beside_the_cap() -> None:
    """Where nothing was won in a step the line of prices has a gap."""
    chart = drawn(some(), [], NO_CURVE)["prices"]
    bid, price, cap = chart.figure["data"]
    assert cap["y"] == [8.0, 8.0]
    assert all(2.0 < one < 2.001 for one in bid["y"] if one is not None)
    assert {one for one in price["y"] if one is not None} == {1.0}
    assert None in price["y"]
    assert "600 bids, 30 of them at the cap of 8 EUR CPM, and 6 wins." in chart.says


def test_medians_are_called_medians() -> None:
    """Where a line item is busy the words say what a point is, and how exact."""
    chart = drawn(replace(some(), step_ms=300_000), [], NO_CURVE)["prices"]
    assert "Medians of 5 minutes, within 9 %." in chart.says
    assert chart.columns[1] == "Median bid (EUR CPM)"


def test_times_are_those_of_the_line_items_zone() -> None:
    """Noon in Zurich is noon on the axis."""
    chart = drawn(some(), [], NO_CURVE)["spend"]
    assert chart.figure["data"][0]["x"][-1] == "2025-12-01 12:00:00.000"
    assert chart.columns[0] == "Time (Europe/Zurich)"


def test_the_value_has_a_band_that_does_not_bury_it() -> None:
    """An interval that reaches the ceiling is cut off, far above the estimate."""
    known = [Estimate(NOON_MS, 4_000_000, 1_000_000, 100 * UNIT)]
    chart = drawing.value(CONFIG, known)
    assert chart.figure["layout"]["yaxis"]["range"][1] == pytest.approx(44.0)
    assert chart.figure["data"][1]["fill"] == "tonexty"
    assert chart.says == "Now 4 EUR CPM, between 1 and 1e+05."


def test_the_win_curve_is_that_of_the_largest_source() -> None:
    """Prices of which nothing is known are left out."""
    chart = drawn(NOTHING, [], CURVE)["wins"]
    assert chart.says == "Source north, second-price auctions, 900 auctions. No more."
    assert chart.rows == (("1", "0.5", "0.4", "0.6"),)


def test_delays_are_counted_by_doublings() -> None:
    """Half of four values had come after two seconds."""
    chart = drawn(some(), [], NO_CURVE)["delays"]
    assert chart.rows == (("512 ms to 1.02 s", "1"), ("1.02 s to 2.05 s", "3"))
    assert chart.says == "4 first values in the last day, half of them within 2.05 s."
