"""Every order is done once per key, whoever sends it twice, and says what was before and after."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import httpx
import pytest

from tests.api.test_taking_back import ONE, wins

pytestmark = pytest.mark.anyio

ORDERS: dict[str, tuple[str, dict[str, Any]]] = {
    "freeze": (f"{ONE}/freeze", {}),
    "thaw": (f"{ONE}/thaw", {}),
    "freeze all": ("/v1/freeze", {}),
    "thaw all": ("/v1/thaw", {}),
    "reset": (f"{ONE}/reset", {}),
    "rewind to a seq": (f"{ONE}/rewind", {"to": 1}),
    "rewind to a time": (f"{ONE}/rewind", {"to": "2026-01-01T00:00:00Z"}),
    "retract a source": (f"{ONE}/retract", {"source": "north"}),
    "retract a span": (f"{ONE}/retract", {"from_at": "2026-01-01T00:00:00Z"}),
    "retract by event": (f"{ONE}/retract", {"event_ids": ["e0"], "part": "value"}),
    "reverse": (f"{ONE}/reverse", {"amount": "0.001"}),
    "close": (f"{ONE}/close", {}),
}


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_an_order_is_done_once_per_key(
    app_client: httpx.AsyncClient, written: Callable[[], dict[str, int]]
) -> None:
    """The repeat answers the same and writes nothing; the key cannot be used for another wish."""
    await wins(app_client, 2)
    for name, (path, wish) in ORDERS.items():
        body, headers = {"reason": "A test.", **wish}, {"Idempotency-Key": name}
        first = await app_client.post(path, json=body, headers=headers)
        assert first.status_code == 200, (name, first.text)
        assert {"before", "after"} <= first.json().keys(), name
        once = written()
        again = await app_client.post(path, json=body, headers=headers)
        assert again.json() == {**first.json(), "after": again.json()["after"]}, name
        other = await app_client.post(path, json={**body, "reason": "Another."}, headers=headers)
        assert (other.status_code, other.json()["code"]) == (409, "idempotency_key_reused"), name
        assert written() == once, name


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_preview_uses_up_no_key(app_client: httpx.AsyncClient) -> None:
    """The order may be given under the key that its preview was sent with."""
    await wins(app_client, 1)
    for order, wish in (("reset", {}), ("rewind", {"to": 1}), ("retract", {"source": "north"})):
        body = {"reason": "A test.", **wish}
        key = {"Idempotency-Key": order}
        seen = await app_client.post(f"{ONE}/{order}", json={**body, "preview": True}, headers=key)
        done = await app_client.post(f"{ONE}/{order}", json=body, headers=key)
        assert (seen.status_code, done.status_code) == (200, 200)
        assert (seen.json().get("preview"), done.json().get("preview")) == (True, None)
