"""Taking back over HTTP, through the real app: previews, answers, refusals that echo nothing."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from typing import Any

import httpx
import pytest

pytestmark = pytest.mark.anyio

ONE = "/v1/line-items/a"
FORM: dict[str, Any] = {
    **{"id": "a", "name": "A", "currency": "EUR", "budget": "5.00", "bid_cap_cpm": 8},
    **{"value": {"ceiling": "0.10", "arrival": "once"}, "policy": {"method": "mean"}},
}


async def wins(client: httpx.AsyncClient, count: int = 3) -> list[str]:
    """Make the line item and win with it; returns the refs."""
    assert (await client.post("/v1/line-items", json=FORM)).status_code == 201
    refs = []
    for n in range(count):
        wish = {"line_item": "a", "source": "north", "deadline_ms": 5000}
        bid = (await client.post("/v1/bids", json=wish)).json()
        for _ in range(20):  # On a busy machine the first slice may come too late for its bid.
            if bid["ticket"] is None:
                bid = (await client.post("/v1/bids", json=wish)).json()
        rows = [
            {"ticket": bid["ticket"], "kind": "won", "clearing_cpm": 1},
            {"ref": bid["ref"], "kind": "value", "value": "0.02", "event_id": f"e{n}"},
        ]
        told = (await client.post("/v1/outcomes", json={"outcomes": rows})).json()["results"]
        assert [row["status"] for row in told] == ["recorded", "recorded"]
        refs.append(bid["ref"])
    return refs


async def ordered(client: httpx.AsyncClient, order: str, **wish: Any) -> Any:
    """Give an order that is obeyed."""
    answer = await client.post(f"{ONE}/{order}", json={"reason": "A test.", **wish})
    assert answer.status_code == 200, answer.text
    return answer.json()


async def test_a_preview_and_then_the_order(app_client: httpx.AsyncClient) -> None:
    """The preview promises what the order does; the repeat has nothing left to do."""
    refs = await wins(app_client)
    seen = await ordered(app_client, "retract", refs=refs[:1], preview=True)
    done = await ordered(app_client, "retract", refs=refs[:1])
    assert (seen["cancelled"], seen["preview"]) == (done["cancelled"], True) == (2, True)
    assert seen["after"]["mean"] == done["after"]["mean"] == "0.02"
    assert done["published"]
    assert (await ordered(app_client, "retract", refs=refs[:1]))["cancelled"] == 0
    span = await ordered(app_client, "retract", source="north", until_at="2199-01-01T00:00:00Z")
    assert span["counts"] == {"won": 2, "value": 2}
    back = await ordered(app_client, "rewind", to="2001-01-01T00:00:00Z")
    assert back["seq"] is None or back["cancelled"] > 0
    state = (await app_client.get(f"{ONE}/state")).json()
    assert (state["money"]["spent"], state["learner"]["wins"]) == ("0.003", 0)


async def test_each_order_can_be_previewed(
    app_client: httpx.AsyncClient, written: Callable[[], dict[str, int]]
) -> None:
    """Sums as money, moments as times, the learner before and after; nothing is written."""
    refs = await wins(app_client, 2)
    for _ in range(200):  # Until the teacher, who looks five times a second, has published both.
        if (await app_client.get(f"{ONE}/state")).json()["learner"]["wins"] == 2:
            break
        await asyncio.sleep(0.05)
    before = written()
    for order, wish in (("retract", {"refs": refs}), ("rewind", {"to": 0}), ("reset", {})):
        told = await ordered(app_client, order, preview=True, **wish)
        assert (told["value"], told["cost"], told["complete"]) == ("0.04", "0.002", True), order
        assert told["first_at"] <= told["last_at"]
        assert told["last_at"].endswith("Z")
        assert told["by_part"]["value"] == {"won": 2, "value": 2}
        assert (told["before"]["wins"], told["after"]["wins"]) == (2, 0)
        assert told["before"]["digest"] != told["after"]["digest"]
        assert told["after"]["bid_cpm"] > 0
    assert written() == before


async def test_money_is_corrected_with_authority(app_client: httpx.AsyncClient) -> None:
    """A refund once per ref; nothing to reconcile; closed in the end."""
    refs = await wins(app_client)
    told = await ordered(app_client, "reverse", amount="0.001", ref=refs[0])
    assert (told["before"]["spent"], told["after"]["spent"]) == ("0.003", "0.002")
    answer = await app_client.post(f"{ONE}/reconcile", json={"reason": "A test.", "spent": "1"})
    assert (answer.status_code, answer.json()["code"]) == (409, "nothing_to_reconcile")
    assert (await ordered(app_client, "close"))["in_force"] is True
    assert (await app_client.get(f"{ONE}/state")).json()["status"] == "closed"
    wish = {"line_item": "a", "deadline_ms": 5000}
    assert (await app_client.post("/v1/bids", json=wish)).json()["pass"] == "frozen"


@pytest.mark.parametrize(
    ("order", "wish"),
    [
        ("retract", {}),
        ("retract", {"refs": ["short"]}),
        ("retract", {"refs": ["A" * 22], "source": "north"}),
        ("retract", {"source": "north", "part": "money"}),
        ("retract", {"event_ids": ["e"] * 1001}),
        ("rewind", {}),
        ("rewind", {"to": -1}),
        ("rewind", {"to": True}),
        ("rewind", {"to": 1.5}),
        ("rewind", {"to": "yesterday"}),
        ("rewind", {"to": 10**9}),
        ("reverse", {"amount": "0"}),
        ("reverse", {"amount": "-1"}),
        ("reverse", {"amount": "1", "ref": "A" * 22}),
        ("reconcile", {"spent": "-1"}),
        ("reconcile", {"spent": "NaN"}),
    ],
)
async def test_what_is_malformed_changes_nothing(
    app_client: httpx.AsyncClient,
    written: Callable[[], dict[str, int]],
    order: str,
    wish: dict[str, Any],
) -> None:
    """A refusal with a code, before anything is written."""
    await wins(app_client, 1)
    before = written()
    answer = await app_client.post(f"{ONE}/{order}", json={"reason": "A test.", **wish})
    assert answer.status_code == 422, answer.text
    assert written() == before


async def test_the_quarantine_is_read_page_by_page(app_client: httpx.AsyncClient) -> None:
    """Empty it is an empty page; a number that is none is not found."""
    await wins(app_client, 1)
    answer = await app_client.get(f"{ONE}/quarantine")
    assert answer.json() == {"quarantine": [], "next": None}
    for query in ("limit=0", "before=x", "after=1", "limit=1&limit=2"):
        assert (await app_client.get(f"{ONE}/quarantine?{query}")).status_code == 422
    for number in ("1", "x", "9" * 20):
        path = f"{ONE}/quarantine/{number}/retry"
        assert (await app_client.post(path, json={"reason": "A test."})).status_code == 404
    assert (await app_client.get("/v1/line-items/b/quarantine")).status_code == 404
