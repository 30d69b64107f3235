"""The forms and routes of tripwires: what may be set, what is refused, who may read."""

from __future__ import annotations

from typing import Any

import httpx
import pytest

from service.tripwires.setups import DEFAULTS

pytestmark = pytest.mark.anyio

PATH = "/v1/line-items/a/tripwires"
FORM = {"id": "a", "name": "A", "currency": "EUR", "budget": "5.00", "bid_cap_cpm": 8}


async def make(client: httpx.AsyncClient, **members: Any) -> httpx.Response:
    """Create the line item."""
    return await client.post("/v1/line-items", json={**FORM, **members})


async def test_what_is_set_is_shown_and_may_be_changed_rule_by_rule(
    app_client: httpx.AsyncClient,
) -> None:
    """Seconds go in and come out; a change of one rule leaves the others as they are."""
    rules = {"value_size": {"action": "warn", "window_s": 600, "ratio": 3, "alpha": 0.0001}}
    made = (await make(app_client, tripwires=rules)).json()
    assert made["tripwires"] == {
        "value_size": {"action": "warn", "window_s": 600, "ratio": 3.0, "alpha": 0.0001},
        "value_silence_s": None,
    }
    changes = {"tripwires": {"voids": {"action": "freeze"}, "value_size": {"action": "freeze"}}}
    answer = await app_client.patch("/v1/line-items/a", json=changes, headers={"If-Match": '"1"'})
    assert answer.status_code == 200, answer.text
    kept = answer.json()["tripwires"]
    assert kept["value_size"]["window_s"] == 600
    assert (kept["value_size"]["action"], kept["voids"]) == ("freeze", {"action": "freeze"})
    shown = (await app_client.get(PATH)).json()
    assert set(shown["rules"]) == set(DEFAULTS)
    assert shown["rules"]["value_size"]["window_s"] == 600
    assert shown["rules"]["no_outcomes"] == {
        "action": "freeze", "window_s": 900, "count_min": 50, "alpha": 1e-6,
    }  # fmt: skip
    assert (shown["open"], shown["over"]) == ([], [])
    state = (await app_client.get("/v1/line-items/a/state")).json()
    assert state["tripwires"]["armed"]["voids"] == "freeze"


@pytest.mark.parametrize(
    ("rules", "field"),
    [
        ({"voids": {"action": "stop"}}, "tripwires.voids.action"),
        ({"voids": {"window_s": 0}}, "tripwires.voids.window_s"),
        ({"voids": {"window_s": 1.5}}, "tripwires.voids.window_s"),
        ({"voids": {"alpha": 0}}, "tripwires.voids.alpha"),
        ({"voids": {"alpha": "0.1"}}, "tripwires.voids.alpha"),
        ({"voids": {"ratio": 1}}, "tripwires.voids.ratio"),
        ({"voids": {"ratio": True}}, "tripwires.voids.ratio"),
        ({"voids": {"share_min": 1.1}}, "tripwires.voids.share_min"),
        ({"win_rate": {"share_min": 0.1}}, "tripwires.win_rate"),
        ({"unfunded": {"window_s": 5}}, "tripwires.unfunded"),
        ({"voids": None}, "tripwires.voids"),
        ({"voids": "off"}, "tripwires.voids"),
        ({"no_such_rule": {"action": "off"}}, "tripwires"),
    ],
)
async def test_a_bad_setting_is_refused_by_its_field(
    app_client: httpx.AsyncClient, rules: dict[str, Any], field: str
) -> None:
    """When a line item is made, changed, and when a setting is tried."""
    answer = await make(app_client, tripwires=rules)
    assert (answer.status_code, answer.json()["code"]) == (422, "bad_field")
    assert answer.json()["field"] == field
    await make(app_client)
    tried = await app_client.post(PATH + "/preview", json={"tripwires": rules})
    assert (tried.status_code, tried.json()["field"]) == (422, field)


async def test_a_setting_is_tried_over_http(app_client: httpx.AsyncClient) -> None:
    """Without a word on rules it tries what is set; on no record nothing would have fired."""
    await make(app_client)
    told = (await app_client.post(PATH + "/preview", json={})).json()
    assert (told["preview"], told["would_freeze"], told["looks"]) == (True, [], 0)
    assert {rule["fired"] for rule in told["rules"].values()} == {0}
    rules = {"voids": {"action": "off"}}
    told = (await app_client.post(PATH + "/preview", json={"tripwires": rules})).json()
    assert told["rules"]["voids"]["setup"]["action"] == "off"
    answer = await app_client.post(PATH + "/preview", json={"rules": {}})
    assert (answer.status_code, answer.json()["code"]) == (422, "bad_field")


@pytest.mark.parametrize("method", ["GET", "POST"])
async def test_an_unknown_line_item_has_no_tripwires(
    app_client: httpx.AsyncClient, method: str
) -> None:
    """404 with the code that every route gives."""
    path = PATH.replace("/a/", "/b/") + ("/preview" if method == "POST" else "")
    answer = await app_client.request(method, path, json={} if method == "POST" else None)
    assert (answer.status_code, answer.json()["code"]) == (404, "no_such_line_item")
