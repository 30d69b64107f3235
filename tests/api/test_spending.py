"""Pacing and return targets over the real app: created, read back, changed and refused."""

from __future__ import annotations

from typing import Any

import httpx
import pytest

from tests.api.test_learning import create, patch, read

pytestmark = pytest.mark.anyio

PROFILE = [0.25, *[1] * 22, 2]
ENDS = {"ends_at": "2099-01-01T00:00:00Z"}


async def test_spending_is_read_back_in_the_form_it_was_given(
    app_client: httpx.AsyncClient,
) -> None:
    """On creation, later and after a change, to the last digit."""
    said: dict[str, Any] = {
        "pacing": {"method": "adaptive", "profile": PROFILE},
        "return_target": {"value_per_unit": "2.5", "strict": True},
    }
    created = await create(app_client, **said)
    assert {name: created[name] for name in said} == said
    assert "pacing.method" not in created["defaults"]
    changed = (await patch(app_client, pacing={"profile": None}, return_target=None)).json()
    assert changed["pacing"] == {"method": "adaptive", "profile": None}
    assert changed["return_target"] is None
    answer = await patch(app_client, 2, return_target={"value_per_unit": "0.000001"})
    assert answer.json()["return_target"] == {"value_per_unit": "0.000001", "strict": False}
    assert await read(app_client) == {**answer.json(), "defaults": []}


async def test_pacing_is_the_default_where_there_is_a_rate(app_client: httpx.AsyncClient) -> None:
    """A daily budget or the end of a flight, and a method whose bid may be moved."""
    flat = {"method": "flat", "price_cpm": 2}
    usual: list[tuple[str, dict[str, Any], str]] = [
        ("a", {}, "none"),
        ("b", {"daily_budget": "1.00"}, "dual"),
        ("c", {"flight": ENDS}, "dual"),
        ("d", {"daily_budget": "1.00", "policy": flat}, "none"),
        ("e", {"daily_budget": "1.00", "policy": {"method": "exptree-win-only"}}, "none"),
    ]
    for name, wish, method in usual:
        created = await create(app_client, **{"id": name, **wish})
        assert (name, created["pacing"]["method"]) == (name, method)
        assert "pacing.method" in created["defaults"]


async def test_the_state_tells_pacing_and_return_in_words_and_numbers(
    app_client: httpx.AsyncClient,
) -> None:
    """Over HTTP, without an int of ours: money as text, the target as it is meant."""
    target = {"value_per_unit": "2.5", "strict": True}
    await create(app_client, daily_budget="1.00", return_target=target)
    block = (await app_client.get("/v1/line-items/a/state")).json()["pacing"]
    assert (block["method"], block["profile"]) == ("dual", None)
    assert block["return_target"]["value_per_unit"] == 2.5
    assert "published results differ" in block["return_target"]["says"]
    assert "no theorem covers" in block["guarantee"]
    assert not [name for name in block if name.endswith(("_nanos", "_ms"))]


@pytest.mark.parametrize(
    "wish",
    [
        {"pacing": {"method": "dual"}, "policy": {"method": "exptree-win-only"}},
        {"return_target": {"value_per_unit": 2}, "policy": {"method": "exptree-win-only"}},
        {
            "return_target": {"value_per_unit": 2},
            "policy": {"method": "flat", "price_cpm": 2},
        },
    ],
)
async def test_what_would_contradict_the_method_is_refused(
    app_client: httpx.AsyncClient, wish: dict[str, Any]
) -> None:
    """With the reason, when created and when changed into it."""
    answer = await app_client.post("/v1/line-items", json=_form(wish))
    assert (answer.status_code, answer.json()["code"]) == (422, "bad_setting")
    assert answer.headers["content-type"] == "application/problem+json"
    await create(app_client)
    assert (await patch(app_client, **wish)).json()["code"] == "bad_setting"


def _form(wish: dict[str, Any]) -> dict[str, Any]:
    return {
        **{"id": "a", "name": "A", "currency": "EUR", "budget": "5.00", "bid_cap_cpm": 8},
        "value": {"ceiling": "0.10"},
        **wish,
    }
