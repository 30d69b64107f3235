"""Hindsight, evidence and a control share over HTTP: units, words and refusals."""

from __future__ import annotations

import asyncio
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
    "policy": {"method": "flat", "price_cpm": 4},
    "value": {"ceiling": "0.10", "arrival": "once", "expected": {"per_impression": "0.003"}},
}


async def played(client: httpx.AsyncClient) -> None:
    """A win at 1.5 CPM worth a cent, and a loss; both in the log when this returns."""
    answers = [(await client.post("/v1/bids", json={"line_item": "a"})).json() for _ in range(2)]
    tickets = [answer["ticket"] for answer in answers]
    value = {"ticket": tickets[0], "kind": "value", "value": "0.01", "event_id": "e"}
    won = {"ticket": tickets[0], "kind": "won", "clearing_cpm": 1.5}
    lost = {"ticket": tickets[1], "kind": "lost"}
    await client.post("/v1/outcomes", json={"outcomes": [won, value, lost]})


async def asked(client: httpx.AsyncClient, **wish: Any) -> dict[str, Any]:
    """The answer once both bids stand in the log."""
    for _ in range(200):
        answer = await client.post(f"{PATH}/a/hindsight", json=wish)
        assert answer.status_code == 200, answer.text
        read: dict[str, Any] = answer.json()
        if read["log"]["auctions"] == 2:
            return read
        await asyncio.sleep(0.02)
    raise AssertionError("the log was never written")


async def test_a_lower_cap_is_told_exactly(app_client: httpx.AsyncClient) -> None:
    """At 2 CPM the win at 1.5 stays, at 1 it goes; money is text, prices are CPM."""
    await app_client.post(PATH, json=FORM)
    await played(app_client)
    kept = await asked(app_client, bid_cap_cpm=2)
    sure = kept["without_model"]
    assert sure["surplus"] == {"low": "0.0085", "high": "0.0085"}
    assert sure["surplus_per_auction"] == {"low_cpm": 4.25, "high_cpm": 4.25}
    assert sure["exact"]["share"] == 1.0
    assert sure["spent"] == {"low": "0.0015", "high": "0.0015"}
    assert kept["alternative"] == {"kind": "cap", "price_cpm": 2.0}
    assert kept["as_it_was"]["surplus"] == sure["surplus"]
    assert kept["from_at"].endswith("Z")
    gone = await asked(app_client, bid_cap_cpm=1)
    assert gone["without_model"]["surplus"] == {"low": "0.00", "high": "0.00"}


async def test_a_higher_price_is_bounded_and_lines_are_labelled(
    app_client: httpx.AsyncClient,
) -> None:
    """The loss may have been won at 6: at worst for nothing, at best for the ceiling."""
    await app_client.post(PATH, json=FORM)
    await played(app_client)
    read = await asked(app_client, flat_price_cpm=6)
    assert read["without_model"]["surplus"] == {"low": "0.0025", "high": "0.1045"}
    assert [line["label"] for line in read["assumed"]] == ["values_alike", "rivals_alike"]
    assert all("assumes" in line["assumes"] for line in read["assumed"])
    (drawn,) = read["drawn"]
    assert drawn["code"] == "bids_not_drawn"


@pytest.mark.parametrize(
    "wish",
    [
        {},
        {"bid_cap_cpm": 1, "floor_cpm": 1},
        {"flat_price_cpm": 9},
        {"flat_price_cpm": -1},
        {"method": "luck"},
        {"method": ""},
        {"floor_cpm": 1, "from_at": "2026-12-01T00:00:00Z", "until_at": "2026-11-01T00:00:00Z"},
        {"floor_cpm": 1, "shiny": 2},
    ],
)
async def test_a_question_that_makes_no_sense_is_refused(
    app_client: httpx.AsyncClient, wish: dict[str, Any]
) -> None:
    """With a code, and without echoing a thing."""
    await app_client.post(PATH, json=FORM)
    answer = await app_client.post(f"{PATH}/a/hindsight", json=wish)
    assert answer.status_code in (400, 422)
    assert answer.json()["code"] == "bad_field"
    assert "luck" not in answer.text


async def test_unknown_line_items_have_no_past(app_client: httpx.AsyncClient) -> None:
    """Not found, as everywhere."""
    assert (await app_client.get(f"{PATH}/b/evidence")).status_code == 404
    answer = await app_client.post(f"{PATH}/b/hindsight", json={"floor_cpm": 1})
    assert answer.status_code == 404


async def test_a_control_share_is_read_back_changed_and_ended(
    app_client: httpx.AsyncClient,
) -> None:
    """As it was given; a change replaces it as a whole; null ends it."""
    control = {"share": 0.1, "method": "flat", "price_cpm": 2.0}
    created = await app_client.post(PATH, json={**FORM, "control": control})
    assert created.json()["control"] == control
    state = (await app_client.get(f"{PATH}/a/state")).json()["control"]
    assert (state["share"], state["price_cpm"]) == (0.1, 2.0)
    assert state["arms"][0]["spent"] == "0.00"
    assert state["says"].startswith("cannot tell yet")
    changed = await app_client.patch(
        f"{PATH}/a",
        json={"control": {"share": "0.25", "price_cpm": 3}},
        headers={"If-Match": '"1"'},
    )
    assert changed.json()["control"] == {"share": 0.25, "method": "flat", "price_cpm": 3.0}
    ended = await app_client.patch(f"{PATH}/a", json={"control": None}, headers={"If-Match": '"2"'})
    assert ended.json()["control"] is None
    # A patch of the cap alone must not leave the plain price above it.
    back = {"control": {"share": 0.1, "price_cpm": 3}}
    await app_client.patch(f"{PATH}/a", json=back, headers={"If-Match": '"3"'})
    low = {"bid_cap_cpm": 2, "policy": {"method": "flat", "price_cpm": 1}}
    refused = await app_client.patch(f"{PATH}/a", json=low, headers={"If-Match": '"4"'})
    assert refused.status_code in (400, 422)


async def test_evidence_is_read_in_money(app_client: httpx.AsyncClient) -> None:
    """Each method with reasons and a cost in the currency."""
    await app_client.post(PATH, json=FORM)
    read = (await app_client.get(f"{PATH}/a/evidence")).json()
    (ucbid,) = [one for one in read["methods"] if one["method"] == "ucbid"]
    assert ucbid["fits"] is True
    assert float(ucbid["learning_cost"]["at_most"]) > 0
    assert "EUR" in ucbid["learning_cost"]["says"]
