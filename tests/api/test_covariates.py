"""Features and hints over HTTP: a line item that reads them, its bids, its outcomes, its state."""

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
    "value": {"ceiling": "0.10", "typical": "0.01", "hints": True},
    "policy": {"method": "linear"},
}
ODD: list[Any] = [
    {},
    {"device": "never seen before", "hour": 25},
    {"device": None},
    {"a" * 64: "b" * 64, "c": -(2**52), "d": True, "ü": "–"},
    {f"feature {n}": "x" for n in range(32)},
    None,
]


async def bid(client: httpx.AsyncClient, **wish: Any) -> dict[str, Any]:
    """One opportunity answered with a bid."""
    answer = await client.post("/v1/bids", json={"line_item": "a", **wish})
    assert answer.status_code == 200, answer.text
    found: dict[str, Any] = answer.json()
    assert found["pass"] is None, found
    return found


async def test_a_linear_line_item_prices_whatever_is_known(app_client: httpx.AsyncClient) -> None:
    """Its dimensions are filled in; unknown, missing, long and no features all get a bid."""
    created = await app_client.post("/v1/line-items", json=FORM)
    assert created.status_code == 201, created.text
    assert created.json()["policy"] == {"method": "linear", "dimensions": 32}
    assert created.json()["value"]["hints"] is True
    assert "policy.dimensions" in created.json()["defaults"]
    for features in ODD:
        answer = await bid(app_client, features=features)
        assert "warnings" not in answer
        assert len(answer["ticket"]) <= 512
        rows = [
            {"ticket": answer["ticket"], "kind": "won", "clearing_cpm": 0.1},
            {"ref": answer["ref"], "kind": "value", "value": "0.01", "event_id": "e"},
        ]
        told = await app_client.post("/v1/outcomes", json={"outcomes": rows})
        assert [row["status"] for row in told.json()["results"]] == ["recorded"] * 2
    state = (await app_client.get("/v1/line-items/a/state")).json()["certainty"]
    assert state["features"]["dimensions"] == 32
    assert "linear" in state["assumptions"]
    assert state["hints"]["ratio_mean"] == 1.0


@pytest.mark.parametrize("number", ["NaN", "Infinity", "1e999"])
async def test_features_that_are_no_numbers_are_refused(
    app_client: httpx.AsyncClient, number: str
) -> None:
    """At the edge, before anything is priced by them."""
    await app_client.post("/v1/line-items", json=FORM)
    body = f'{{"line_item": "a", "features": {{"hour": {number}}}}}'
    headers = {"Content-Type": "application/json"}
    answer = await app_client.post("/v1/bids", content=body, headers=headers)
    assert answer.status_code in (400, 422), answer.text
    assert answer.headers["content-type"] == "application/problem+json"


async def test_a_hint_is_bid_at_once_by_the_guess_that_it_is_right(
    app_client: httpx.AsyncClient,
) -> None:
    """Before any value, the ratio is 1; hints are amounts of money, and zero wins nothing."""
    await app_client.post("/v1/line-items", json={**FORM, "policy": {"method": "mean"}})
    assert (await bid(app_client, value_hint="0.003"))["bid_cpm"] == 3.0
    assert (await bid(app_client, value_hint="0.0000015"))["bid_cpm"] == 0.0015
    nothing = {"line_item": "a", "value_hint": 0}
    answer = (await app_client.post("/v1/bids", json=nothing)).json()
    assert answer["pass"] == "price_rounds_to_zero"
