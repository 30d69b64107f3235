"""The charts of a line item as plain data: figures for the charting library, and the same as text.

Colours are named by their part in a figure; the page puts in those of its look. Pure.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from service.estimates import Estimate
from service.judging import planned_at
from service.learner.profile import day_of
from service.store.watching_series import Series

# About half an hour each over a whole day: finer steps only show the noise of single bids.
BUCKETS = 48
ROWS_MAX = 12
CPM = 10**6
NANOS = 10**9
DELAY_UNITS = ((86_400_000, "d"), (3_600_000, "h"), (60_000, "min"), (1000, "s"))
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)

Whole = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Chart:
    """
    One chart: its figure, and what it says as a sentence and a table.

    Args:
        says: The summary, for whoever does not see the figure.
        rows: The same numbers, thinned out, as text under `columns`.
    """

    id: str
    title: str
    says: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    figure: dict[str, Any]


def charts(
    config: Mapping[str, Any],
    series: Series,
    known: Sequence[Estimate],
    curve: Mapping[str, Any],
    created_ms: int,
) -> list[Chart]:
    """Spend, prices, value, win curve and delays, in this order."""
    return [
        spend(config, series, created_ms),
        prices(config, series),
        value(config, known),
        wins(config, curve),
        delays(series),
    ]


def spend(config: Mapping[str, Any], series: Series, created_ms: int) -> Chart:
    """Money spent today beside the plan."""
    zone, currency, daily = (
        config["flight"]["time_zone"],
        config["currency"],
        config["daily_budget"],
    )
    starts_ms, ends_ms = day_of(series.wall_ms, zone)
    # The clock of the service may be a second behind the newest entry.
    now_ms = max([series.wall_ms, *(at for at, _ in series.costs[-1:])])
    starts_ms = min(max(starts_ms, created_ms), now_ms)
    today = [(at, cost) for at, cost in series.costs if at >= starts_ms]
    before = max(0, series.day_spent - sum(cost for _, cost in today))
    edges = np.linspace(starts_ms, now_ms, BUCKETS + 1).astype(np.int64)
    spent = before + _cumulated(today, edges)
    traces = [_line("spent", _times(edges, zone), spent / NANOS, "accent", shape="hv")]
    plan: list[int] = []
    if daily is not None:
        whole = np.linspace(starts_ms, ends_ms - 1, BUCKETS + 1).astype(np.int64)
        ends = [planned_at(config, created_ms, int(at)) for at in whole]
        traces.append(
            _line("plan", _times(whole, zone), np.array(ends) / NANOS, "quiet", dash="dot")
        )
        plan = [planned_at(config, created_ms, int(at)) for at in edges]
    says = f"Spent today: {spent[-1] / NANOS:.2f} {currency}"
    says += (
        f"; by plan it would be {plan[-1] / NANOS:.2f} {currency}."
        if plan
        else "; no daily budget."
    )
    rows = [
        (_clock(int(at), zone), f"{now / NANOS:.2f}", f"{plan[n] / NANOS:.2f}" if plan else "none")
        for n, (at, now) in enumerate(zip(edges, spent, strict=True))
    ]
    return Chart(
        "spend",
        "Spent today against plan",
        says,
        (f"Time ({zone})", f"Spent ({currency})", f"Plan ({currency})"),
        _thinned(rows),
        _figure(traces, f"Time ({zone})", currency),
    )


def prices(config: Mapping[str, Any], series: Series) -> Chart:
    """Mean bid and mean clearing price over the newest hours."""
    zone, currency = config["flight"]["time_zone"], config["currency"]
    moments = [at for at, _ in (*series.bids, *series.clearing)]
    kind = "mean" if series.step_ms is None else "median"
    columns = tuple(f"{kind.capitalize()} {of} ({currency} CPM)" for of in ("bid", "price"))
    columns = (f"Time ({zone})", *columns)
    title = "Bids and clearing prices"
    if not moments:
        return Chart("prices", title, "No bid and no win yet.", columns, (), {})
    edges = np.linspace(min(moments), max(moments) + 1, BUCKETS + 1).astype(np.int64)
    bid, paid = _means(series.bids, edges), _means(series.clearing, edges)
    times = _times((edges[:-1] + edges[1:]) // 2, zone)
    cap = config["bid_cap"] / CPM
    traces = [
        _line(f"{kind} bid", times, bid / CPM, "accent", markers=True),
        _line(f"{kind} clearing price", times, paid / CPM, "second", markers=True),
        _line("cap", [times[0], times[-1]], np.array([cap, cap]), "quiet", dash="dot"),
    ]
    says = f"In the last day {series.bids_counted:,} bids, {series.capped:,} of them at the cap "
    says += f"of {cap:g} {currency} CPM, and {series.wins_counted:,} wins."
    if series.step_ms is not None:
        says += f" Medians of {series.step_ms // 60_000} minutes, within 9 %."
    rows = [
        (_clock(int(at), zone), _said(one / CPM), _said(other / CPM))
        for at, one, other in zip(edges[:-1], bid, paid, strict=True)
        if not (np.isnan(one) and np.isnan(other))
    ]
    axis = f"{currency} CPM"
    return Chart("prices", title, says, columns, _thinned(rows), _figure(traces, columns[0], axis))


def value(config: Mapping[str, Any], known: Sequence[Estimate]) -> Chart:
    """What an impression is believed to be worth, with its interval, over time."""
    zone, currency = config["flight"]["time_zone"], config["currency"]
    columns = (f"Time ({zone})", *(f"{name} ({currency} CPM)" for name in ("Mean", "Low", "High")))
    title = "Value of an impression, with its 95 % interval"
    if not known:
        return Chart("value", title, "Nothing is learnt yet.", columns, (), {})
    times = _times(np.array([one.at_ms for one in known]), zone)
    low, high = (np.array([getattr(one, side) for one in known]) / CPM for side in ("low", "high"))
    mean = np.array([np.nan if one.mean is None else one.mean / CPM for one in known])
    traces = [
        _line("high end", times, high, "band"),
        {**_line("low end", times, low, "band"), "fill": "tonexty"},
        _line("mean", times, mean, "accent", markers=True),
    ]
    says = f"Now {_said(mean[-1])} {currency} CPM, between {_said(low[-1])} and {_said(high[-1])}."
    rows = [
        (_clock(one.at_ms, zone), *map(_said, (mean[n], low[n], high[n])))
        for n, one in enumerate(known)
    ]
    figure = _figure(traces, columns[0], f"{currency} CPM")
    # The interval of a new line item reaches up to the ceiling, far above all that matters.
    top = float(np.nanmax(np.append(mean, config["bid_cap"] / CPM)))
    figure["layout"]["yaxis"]["range"] = [0, 1.1 * max(top, min(float(high[-1]), 5 * top))]
    return Chart("value", title, says, columns, _thinned(rows), figure)


def wins(config: Mapping[str, Any], curve: Mapping[str, Any]) -> Chart:
    """The chance to win at each price, for the source that most is known of."""
    currency, sources = config["currency"], list(curve["sources"])
    columns = (f"Price ({currency} CPM)", "Chance to win", "Low", "High")
    title = "Chance to win at a price"
    if not sources:
        return Chart("wins", title, "No auction has told anything yet.", columns, (), {})
    most = max(sources, key=lambda source: float(source["auctions"]))
    # A price of which nothing is known would be drawn as a chance of nought.
    told = [row for row in most["prices"] if row["win_probability"]["estimate"] is not None]
    price = [row["price_cpm_nanos"] / CPM for row in told]
    chance, low, high = (
        np.array([_number(row["win_probability"][side]) for row in told])
        for side in ("estimate", "low", "high")
    )
    traces = [
        _line("high end", price, high, "band", shape="hv"),
        {**_line("low end", price, low, "band", shape="hv"), "fill": "tonexty"},
        _line("chance", price, chance, "accent", shape="hv"),
    ]
    name = most["source"] or "sources without a name of their own"
    says = f"Source {name}, {most['auction']}-price auctions, {most['auctions']:,.0f} auctions. "
    if most["says"]:
        says += f"{str(most['says']).capitalize()}."
    rows = [(f"{at:g}", *map(_said, (chance[n], low[n], high[n]))) for n, at in enumerate(price)]
    figure = _figure(traces, columns[0], "share of auctions")
    figure["layout"]["yaxis"]["range"] = [0, 1.02]
    return Chart("wins", title, says, columns, _thinned(rows), figure)


def delays(series: Series) -> Chart:
    """How long after their win first values came in the last day, by doublings."""
    title, told = "How long values take", series.delays
    columns = ("Delay", "Values (count)")
    total = sum(count for _, _, count in told)
    if not total:
        return Chart("delays", title, "No value has come in the last day.", columns, (), {})
    names = [f"{_span(low)} to {_span(high)}" for low, high, _ in told]
    counts = [count for _, _, count in told]
    trace = {"type": "bar", "x": names, "y": counts, "name": "values", "meta": "accent"}
    # Doublings tell a median only to its bin, so the bin's end is named.
    place = int(np.searchsorted(np.cumsum(counts), total / 2))
    says = f"{total:,} first values in the last day, half of them within {_span(told[place][1])}."
    rows = [(name, f"{count:,}") for name, count in zip(names, counts, strict=True) if count]
    figure = _figure([trace], columns[0], "values")
    return Chart("delays", title, says, columns, tuple(rows), figure)


def _span(span_ms: int) -> str:
    """A duration in the largest unit that leaves at least one."""
    size, unit = next((one for one in DELAY_UNITS if span_ms >= one[0]), (1, "ms"))
    return f"{span_ms / size:.3g} {unit}"


def _cumulated(costs: Sequence[tuple[int, int]], edges: Whole) -> Whole:
    """What was spent by each of these moments."""
    at = np.array([moment for moment, _ in costs], dtype=np.int64)
    sums = np.append(0, np.cumsum([cost for _, cost in costs], dtype=np.int64)).astype(np.int64)
    return np.asarray(sums[np.searchsorted(at, edges, side="right")], dtype=np.int64)


def _means(points: Sequence[tuple[int, int]], edges: Whole) -> NDArray[np.float64]:
    """The mean between each pair of edges; not a number where there is none."""
    at = np.array([moment for moment, _ in points], dtype=np.int64)
    sizes = np.array([size for _, size in points], dtype=np.float64)
    counts, _ = np.histogram(at, bins=edges)
    sums, _ = np.histogram(at, bins=edges, weights=sizes)
    with np.errstate(invalid="ignore"):
        return np.asarray(np.where(counts > 0, sums / np.maximum(counts, 1), np.nan))


def _line(name: str, x: Sequence[Any], y: NDArray[Any], part: str, **style: Any) -> dict[str, Any]:
    """One line of a figure; gaps are null, since JSON knows no NaN."""
    markers = style.pop("markers", False)
    heights = [None if np.isnan(one) else float(one) for one in np.asarray(y, dtype=np.float64)]
    return {
        **{"type": "scatter", "mode": "lines+markers" if markers else "lines", "name": name},
        **{"x": list(x), "y": heights, "meta": part, "line": style, "connectgaps": True},
    }


def _figure(traces: list[dict[str, Any]], across: str, up: str) -> dict[str, Any]:
    layout = {
        "xaxis": {"title": {"text": across}},
        "yaxis": {"title": {"text": up}, "rangemode": "tozero"},
    }
    return {"data": traces, "layout": layout}


def _times(moments: Whole, zone: str) -> list[str]:
    """Moments as the clocks of the zone show them; the library knows no zones."""
    return [f"{_local(int(at), zone):%Y-%m-%d %H:%M:%S.%f}"[:-3] for at in moments]


def _clock(at_ms: int, zone: str) -> str:
    return f"{_local(at_ms, zone):%m-%d %H:%M:%S}"


def _local(at_ms: int, zone: str) -> datetime:
    return (_EPOCH + timedelta(milliseconds=at_ms)).astimezone(ZoneInfo(zone))


def _said(number: float) -> str:
    return "none" if np.isnan(number) else f"{number:.4g}"


def _number(told: object) -> float:
    return float(told) if isinstance(told, int | float) else np.nan


def _thinned(rows: Sequence[tuple[str, ...]]) -> tuple[tuple[str, ...], ...]:
    """Some rows, the first and the last among them."""
    if len(rows) <= ROWS_MAX:
        return tuple(rows)
    places = np.unique(np.linspace(0, len(rows) - 1, ROWS_MAX).round().astype(int))
    return tuple(rows[place] for place in places)
