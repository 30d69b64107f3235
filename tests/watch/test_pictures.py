"""The charts of a rehearsal: one line a policy, and the same numbers as text."""

from __future__ import annotations

from typing import Any

from service.watch.pictures import PARTS, rehearsal_charts


def curve(points: int) -> list[dict[str, Any]]:
    """A policy that earns and spends a unit an auction, and bids from the second point on."""
    return [
        {
            "auction": n + 1,
            "surplus": {"mean_nanos": n * 10**9},
            "spend": {"mean_nanos": 2 * n * 10**9},
            "bid_cpm_nanos": None if n == 0 else 3 * 10**6,
        }
        for n in range(points)
    ]


def result(policies: int, points: int) -> dict[str, Any]:
    """What a rehearsal came to, as far as it is drawn."""
    named = [{"name": f"policy {n}", "curve": curve(points)} for n in range(policies)]
    return {"currency": "EUR", "policies": named}


def test_every_policy_is_a_line_of_its_own() -> None:
    """Told apart by colour or by stroke, with units in the axes and gaps where nothing was bid."""
    surplus, _, bid = rehearsal_charts(result(8, 40))
    looks = {(one["meta"], one["line"]["dash"]) for one in surplus.figure["data"]}
    assert len(looks) == 8 == len(PARTS)
    assert surplus.figure["data"][0]["y"][-1] == 39.0
    assert bid.figure["data"][0]["y"][:2] == [None, 3.0]
    assert bid.figure["layout"]["yaxis"]["title"]["text"] == "EUR CPM"


def test_the_text_has_the_end_and_some_points_before() -> None:
    """The last point is the last row; there are never more than fit a phone."""
    for points in (1, 5, 12, 13, 40):
        _, spend, _ = rehearsal_charts(result(2, points))
        assert len(spend.rows) <= 12
        assert spend.rows[-1][0] == f"{points}"
        assert spend.columns == ("Auctions", "policy 0 (EUR)", "policy 1 (EUR)")
    assert spend.says == "At the end: policy 0 78 EUR, policy 1 78 EUR."


def test_nothing_played_is_said() -> None:
    """An empty curve draws no figure."""
    for chart in rehearsal_charts(result(1, 0)):
        assert (chart.says, chart.figure, chart.rows) == ("No auction was played.", {}, ())
