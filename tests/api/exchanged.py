"""The service with a mapping before a small exchange, for tests of the standard's routes."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import httpx

from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys
from tests.openrtb.sources import LINE, SOURCE
from tests.openrtb.standard import bids_of, faults

BIDS = "/openrtb/north/bids"
GARDEN: dict[str, Any] = {
    "id": "garden",
    "name": "An invented garden",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "0.10", "arrival": "once"},
    "policy": {"method": "flat", "price_cpm": 2},
}
EUROS: dict[str, Any] = {"cur": ["EUR"], "tmax": 5000}


@asynccontextmanager
async def serving(
    url: str, directory: Path, *lines: dict[str, Any], **source: Any
) -> AsyncIterator[httpx.AsyncClient]:
    """The service with one line item and a mapping, before a caller who may do everything."""
    built = [LINE | line for line in lines or ({},)]
    told = {"sources": {"north": SOURCE | source | {"line_items": built}}}
    file = directory / "mapping.json"
    file.write_text(json.dumps(told), "utf-8")
    patient = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}
    quick = {"BIDKEEL_CHANGE_POLL_MS": "20", "BIDKEEL_TICK_S": "1"}
    named = {"BIDKEEL_DATABASE_URL": url, "BIDKEEL_OPENRTB_MAPPING": str(file)}
    settings = load({**named, **patient, **quick})
    database = open_database(settings)
    _, bearer = keys.add(database, "tests", ["admin"])
    database.close()
    app = create_app(settings)
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    headers = {"Authorization": f"Bearer {bearer}"}
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url="http://test", headers=headers) as client,
    ):
        assert (await client.post("/v1/line-items", json=GARDEN)).status_code == 201
        yield client


async def spent(client: httpx.AsyncClient, name: str = "garden") -> str:
    """What a line item has spent, as people read it."""
    return str((await client.get(f"/v1/line-items/{name}/state")).json()["money"]["spent"])


async def one_bid(client: httpx.AsyncClient, body: dict[str, Any]) -> dict[str, Any]:
    """The one bid on a request."""
    answer = await client.post(BIDS, json=body)
    assert answer.status_code == 200, answer.text
    assert faults(answer.json(), body) == []
    (bid,) = bids_of(answer.json())
    return dict(bid)


async def rated(client: httpx.AsyncClient, body: dict[str, Any]) -> httpx.Response:
    """The answer once the rate has reached the worker; a loop that is kept busy hears late."""
    async with asyncio.timeout(20):
        while (answer := await client.post(BIDS, json=body)).status_code == 204:
            await asyncio.sleep(0.02)
    return answer


def filled(url: str, **macros: str) -> str:
    """A notice's address below our own host, with its macros replaced and the rest empty."""
    for name, value in macros.items():
        url = url.replace(f"${{AUCTION_{name}}}", value)
    while "${" in url:
        url = url[: url.index("${")] + url[url.index("}") + 1 :]
    parts = urlsplit(url)
    return f"{parts.path}?{parts.query}"
