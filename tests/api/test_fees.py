"""Fees and auctions of a line item over HTTP: given, read back, changed, and bid with."""

from __future__ import annotations

from typing import Any

import httpx
import pytest

pytestmark = pytest.mark.anyio

PATH = "/v1/line-items"
FORM: dict[str, Any] = {
    "id": "a",
    "name": "A",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "auction": "first",
    "policy": {"method": "flat", "price_cpm": 2.39},
    "value": {"ceiling": "0.10"},
    "fees": {"share": "0.12", "cpm": "0.15"},
}


async def test_fees_are_read_back_as_they_were_given(app_client: httpx.AsyncClient) -> None:
    """A change of one keeps the other, and null takes both away."""
    created = (await app_client.post(PATH, json=FORM)).json()
    assert (created["auction"], created["fees"]) == ("first", {"share": "0.12", "cpm": "0.15"})
    headers = {"If-Match": '"1"'}
    changed = await app_client.patch(f"{PATH}/a", json={"fees": {"cpm": "0.2"}}, headers=headers)
    assert changed.json()["fees"] == {"share": "0.12", "cpm": "0.20"}
    headers = {"If-Match": '"2"'}
    none = await app_client.patch(f"{PATH}/a", json={"fees": None}, headers=headers)
    assert none.json()["fees"] is None


async def test_a_bid_leaves_net_of_fees_and_a_win_needs_no_price(
    app_client: httpx.AsyncClient,
) -> None:
    """Worth 2.39 CPM with its fees, it bids 2; the first-price win costs what was held."""
    await app_client.post(PATH, json=FORM)
    answer = (await app_client.post("/v1/bids", json={"line_item": "a"})).json()
    assert answer["bid_cpm"] == 2.0
    won = {"outcomes": [{"kind": "won", "ticket": answer["ticket"]}]}
    told = (await app_client.post("/v1/outcomes", json=won)).json()
    assert told["results"][0]["status"] == "recorded"
    state = (await app_client.get(f"{PATH}/a/state")).json()
    assert (state["money"]["spent"], state["bid"]["price_cpm"]) == ("0.00239", 2.0)


async def test_line_items_compete_over_http(app_client: httpx.AsyncClient) -> None:
    """One answer, in the name of the one that bids; unknown ones spoil the call."""
    await app_client.post(PATH, json=FORM)
    await app_client.post(
        PATH, json={**FORM, "id": "b", "policy": {"method": "flat", "price_cpm": 3}}
    )
    answer = await app_client.post("/v1/bids", json={"line_items": ["a", "b"], "auction": "second"})
    assert answer.json()["line_item"] == "b"
    unknown = await app_client.post("/v1/bids", json={"line_items": ["a", "c"]})
    assert unknown.status_code == 404


@pytest.mark.parametrize("fees", [{"share": "1.1"}, {"share": -1}, {"cpm": "0.0000001"}, {"x": 1}])
async def test_fees_that_make_no_sense_are_refused(
    app_client: httpx.AsyncClient, fees: dict[str, Any]
) -> None:
    """A share above the whole price, one below nothing, a price too fine, an unknown name."""
    answer = await app_client.post(PATH, json={**FORM, "fees": fees})
    assert (answer.status_code, answer.json()["code"]) == (422, "bad_field")
