"""The charts of a rehearsal as plain data, in the form of those of a line item; pure."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service import money
from service.drawing import ROWS_MAX, Chart

# Of eight policies at most; told apart by their strokes too, for whoever sees few colours.
PARTS = ("accent", "second", "good", "stop", "warn", "quiet", "ink", "band")
STROKES = ("solid", "dash", "dot", "dashdot")
PANELS = {
    "surplus": "Surplus so far",
    "spend": "Spend so far",
    "bid": "Mean bid",
}


def rehearsal_charts(result: Mapping[str, Any]) -> list[Chart]:
    """Surplus, spend and bids over the auctions, each policy as a line."""
    return [_chart(result, name) for name in PANELS]


def _chart(result: Mapping[str, Any], name: str) -> Chart:
    policies, unit = result["policies"], _unit(result, name)
    lines = [[_height(row, name) for row in policy["curve"]] for policy in policies]
    at = [row["auction"] for row in policies[0]["curve"]]
    traces = [
        {
            **{"type": "scatter", "mode": "lines", "name": policy["name"], "x": at, "y": line},
            **{"meta": PARTS[n % len(PARTS)], "connectgaps": True},
            "line": {"dash": STROKES[n % len(STROKES)]},
        }
        for n, (policy, line) in enumerate(zip(policies, lines, strict=True))
    ]
    layout = {"xaxis": {"title": {"text": "Auctions"}}, "yaxis": {"title": {"text": unit}}}
    return Chart(
        name,
        PANELS[name],
        _says(result, lines, unit),
        ("Auctions", *(f"{policy['name']} ({unit})" for policy in policies)),
        _rows(at, lines),
        {"data": traces, "layout": layout} if at else {},
    )


def _unit(result: Mapping[str, Any], name: str) -> str:
    currency = str(result["currency"])
    return f"{currency} CPM" if name == "bid" else currency


def _height(row: Mapping[str, Any], name: str) -> float | None:
    if name == "bid":
        bid = row["bid_cpm_nanos"]
        return None if bid is None else bid / money.NANOS_PER_CPM
    return float(row[name]["mean_nanos"]) / money.NANOS_PER_UNIT


def _says(result: Mapping[str, Any], lines: list[list[float | None]], unit: str) -> str:
    ends = [
        f"{policy['name']} {_said(line[-1])} {unit}"
        for policy, line in zip(result["policies"], lines, strict=True)
        if line
    ]
    return f"At the end: {', '.join(ends)}." if ends else "No auction was played."


def _rows(at: list[int], lines: list[list[float | None]]) -> tuple[tuple[str, ...], ...]:
    """Some points of each line, the last among them."""
    step = max(1, -(-len(at) // ROWS_MAX))
    places = list(range(len(at) - 1, -1, -step))[::-1]
    return tuple((f"{at[p]:,}", *(_said(line[p]) for line in lines)) for p in places)


def _said(height: float | None) -> str:
    return "none" if height is None else f"{height:.4g}"
