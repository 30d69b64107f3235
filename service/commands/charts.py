"""The chart of a rehearsal as a PNG and as one HTML file that needs no internet."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from service import money

# Told apart with any colour vision (Okabe, Ito, "Color Universal Design", 2008, from memory).
COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000", "#F0E442")
BAND = 0.18  # How much of its colour shows between the 10 % and the 90 % end.
SIZE_INCHES, DOTS_PER_INCH = (9.0, 9.0), 120
HEIGHT_PIXELS = 900

Result = Mapping[str, Any]
Panel = tuple[str, str]  # What of a curve is drawn, and its axis.


def panels(result: Result) -> list[Panel]:
    """The three panels of every chart, each with its unit."""
    currency = result["currency"]
    return [
        ("surplus", f"surplus so far ({currency})"),
        ("spend", f"spend so far ({currency})"),
        ("bid", f"mean bid ({currency} CPM)"),
    ]


def heading(result: Result) -> str:
    """What a chart shows, in a line."""
    seeds = result["seeds"]
    spread = f", band: {result['span']}" if seeds > 1 else ""
    return (
        f"Rehearsal: market {result['market']}, {result['auction']} price, "
        f"{result['auctions']:,} auctions, {seeds} seed{'s' if seeds > 1 else ''}{spread}"
    )


def draw_png(result: Result, path: Path) -> None:
    """Write the chart as a picture."""
    # Loaded here, since it takes longer than any other command needs in all.
    from matplotlib.figure import Figure

    picture = Figure(figsize=SIZE_INCHES, dpi=DOTS_PER_INCH, layout="constrained")
    places = picture.subplots(3, 1, sharex=True)
    for place, (name, label) in zip(places, panels(result), strict=True):
        for colour, policy in zip(COLOURS, result["policies"], strict=False):
            at, low, mean, high = _line(policy["curve"], name)
            place.plot(at, mean, color=colour, label=policy["name"])
            if name != "bid" and result["seeds"] > 1:
                place.fill_between(at, low, high, color=colour, alpha=BAND, linewidth=0)
        place.set_ylabel(label)
        place.grid(alpha=0.3)
    places[0].legend(loc="best")
    places[-1].set_xlabel("auctions")
    picture.suptitle(heading(result), fontsize=10)
    picture.savefig(path, format="png")


def draw_html(result: Result, path: Path) -> None:
    """Write the chart as a page with its script inside."""
    from plotly import graph_objects as graph
    from plotly.subplots import make_subplots

    picture = make_subplots(rows=3, cols=1, shared_xaxes=True, vertical_spacing=0.04)
    for row, (name, label) in enumerate(panels(result), start=1):
        for colour, policy in zip(COLOURS, result["policies"], strict=False):
            at, low, mean, high = _line(policy["curve"], name)
            if name != "bid" and result["seeds"] > 1:
                around = {"x": at + at[::-1], "y": high + low[::-1], "fill": "toself"}
                quiet = {"hoverinfo": "skip", "showlegend": False, "opacity": BAND}
                band = graph.Scatter(**around, **quiet, line_width=0, fillcolor=colour)
                picture.add_trace(band, row=row, col=1)
            line = graph.Scatter(
                x=at, y=mean, name=policy["name"], line_color=colour, showlegend=row == 1
            )
            picture.add_trace(line, row=row, col=1)
        picture.update_yaxes(title_text=label, row=row, col=1)
    picture.update_xaxes(title_text="auctions", row=3, col=1)
    picture.update_layout(title=heading(result), height=HEIGHT_PIXELS, template="plotly_white")
    picture.write_html(path, include_plotlyjs=True, full_html=True)


def _line(
    curve: Sequence[Mapping[str, Any]], name: str
) -> tuple[list[int], list[float], list[float], list[float]]:
    """Auctions, and low end, mean and high end, in currency units or CPM."""
    if name == "bid":
        rows = [row for row in curve if row["bid_cpm_nanos"] is not None]
        bids = [row["bid_cpm_nanos"] / money.NANOS_PER_CPM for row in rows]
        return [row["auction"] for row in rows], bids, bids, bids
    at = [row["auction"] for row in curve]
    ends = [
        [row[name][f"{end}_nanos"] / money.NANOS_PER_UNIT for row in curve]
        for end in ("low", "mean", "high")
    ]
    return at, ends[0], ends[1], ends[2]
