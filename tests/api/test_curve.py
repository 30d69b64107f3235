"""The curve as callers read it: what is known at each price, what it costs, and what is not."""

from __future__ import annotations

from typing import Any

import httpx
import pytest

pytestmark = pytest.mark.anyio

FORM: dict[str, Any] = {
    "id": "a",
    "name": "A",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "policy": {"method": "flat", "price_cpm": 4},
    "value": {"ceiling": "0.10", "expected": {"per_impression": "0.003"}},
}


async def play(client: httpx.AsyncClient, auction: str, rivals: list[float]) -> None:
    """Bid 4 CPM against these and report them."""
    outcomes = []
    for rival in rivals:
        wish = {"line_item": "a", "source": "north", "auction": auction}
        answer = (await client.post("/v1/bids", json=wish)).json()
        won = answer["bid_cpm"] >= rival
        outcome = {"ticket": answer["ticket"], "kind": "won" if won else "lost"}
        if won and auction == "second":
            outcome["clearing_cpm"] = rival
        outcomes.append(outcome)
    told = await client.post("/v1/outcomes", json={"outcomes": outcomes})
    assert {row["status"] for row in told.json()["results"]} == {"recorded"}


async def curve(client: httpx.AsyncClient, auctions: float = 0.0) -> dict[str, Any]:
    """The curve once so many auctions are in it."""
    for _ in range(200):
        answer = await client.get("/v1/line-items/a/curve")
        assert answer.status_code == 200, answer.text
        read: dict[str, Any] = answer.json()
        if sum(source["auctions"] for source in read["sources"]) >= auctions:
            return read
    raise AssertionError("nothing was learnt")


async def test_before_the_first_auction_it_says_so(app_client: httpx.AsyncClient) -> None:
    """No source, no number, but the value it would be weighed against."""
    await app_client.post("/v1/line-items", json=FORM)
    read = await curve(app_client)
    assert (read["sources"], read["value"]["estimate_cpm"]) == ([], 3.0)
    assert "no auction" in read["says"]
    assert any("correlated" in caution for caution in read["cautions"])


async def test_a_second_price_curve_by_hand(app_client: httpx.AsyncClient) -> None:
    """Rivals at 1, 2 and 6 CPM: two thirds are won at 2, at 1 CPM each, and above 4 is silence."""
    await app_client.post("/v1/line-items", json=FORM)
    await play(app_client, "second", [1.0, 2.0, 6.0])
    (source,) = (await curve(app_client, 3))["sources"]
    assert (source["source"], source["auction"], source["method"]) == (
        "north",
        "second",
        "kaplan-meier",
    )
    assert source["identified"]["to_cpm"] == pytest.approx(4.0, abs=0.0125)
    rows = source["prices"]
    assert 10 <= len(rows) <= 50
    row = next(row for row in rows if 2.0 <= row["price_cpm"] < 4.0)
    assert row["win_probability"]["estimate"] == pytest.approx(2 / 3)
    assert 0 <= row["win_probability"]["low"] < 2 / 3 < row["win_probability"]["high"] <= 1
    assert row["expected_cost"]["estimate_cpm"] == pytest.approx(1.0, abs=1e-6)
    assert row["expected_surplus"]["estimate_cpm"] == pytest.approx(1.0, abs=1e-6)
    assert row["expected_cost"]["low_cpm"] <= 1.0 <= row["expected_cost"]["high_cpm"]
    beyond = rows[-1]
    assert (beyond["price_cpm"], beyond["identified"]) == (8.0, False)
    assert beyond["win_probability"]["estimate"] is None
    assert beyond["win_probability"]["high"] == 1.0


async def test_a_first_price_curve_pays_the_bid(app_client: httpx.AsyncClient) -> None:
    """Three of four won at 4 CPM: each auction costs 3 and loses 0.75 at a value of 3."""
    await app_client.post("/v1/line-items", json=FORM)
    await play(app_client, "first", [1.0, 2.0, 3.0, 6.0])
    (source,) = (await curve(app_client, 4))["sources"]
    row = next(row for row in source["prices"] if row["price_cpm"] == 4.0)
    assert row["win_probability"]["estimate"] == 0.75
    assert row["expected_cost"]["estimate_cpm"] == 3.0
    assert row["expected_surplus"]["estimate_cpm"] == -0.75
    assert row["expected_surplus"]["low_cpm"] <= -0.75
    assert all(not row["identified"] for row in source["prices"] if row["price_cpm"] > 4.0)


async def test_an_unknown_line_item_has_no_curve(app_client: httpx.AsyncClient) -> None:
    """Not found, as everywhere."""
    assert (await app_client.get("/v1/line-items/b/curve")).status_code == 404
