"""The whole service over its real ASGI application: start, health, an outage, a clean stop."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any

import httpx
import pytest
from fastapi import FastAPI
from sqlalchemy import create_engine, text

from service.app import create_app
from service.errors import Unsafe
from service.guard.ticket import TicketKeys
from service.settings import load
from service.store import keys
from service.store.database import Database
from tests.builders import outage

pytestmark = pytest.mark.anyio

# Quick duties, and a deadline that a busy machine keeps.
QUICK = {"BIDKEEL_TEACH_MS": "20", "BIDKEEL_CHANGE_POLL_MS": "20", "BIDKEEL_TICK_S": "1"}
QUICK |= {"BIDKEEL_DEADLINE_MS_MAX": "5000"}
GARDEN: dict[str, Any] = {
    "id": "garden",
    "name": "An invented garden",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "0.10", "arrival": "once"},
    "policy": {"method": "flat", "price_cpm": 2},
}


def client_of(app: FastAPI, bearer: str = "none") -> httpx.AsyncClient:
    """A caller with a key, before this application."""
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    headers = {"Authorization": f"Bearer {bearer}"}
    return httpx.AsyncClient(transport=transport, base_url="http://test", headers=headers)


@asynccontextmanager
async def serving(url: str, **settings: str) -> AsyncIterator[httpx.AsyncClient]:
    """The running service with a caller who may do everything."""
    database = Database(url)
    _, bearer = keys.add(database, "tests", ["admin"])
    database.close()
    app = create_app(load({"BIDKEEL_DATABASE_URL": url, **QUICK, **settings}))
    async with app.router.lifespan_context(app), client_of(app, bearer) as client:
        yield client


async def bid(client: httpx.AsyncClient, **wish: Any) -> dict[str, Any]:
    """Ask for one price."""
    answer = await client.post(
        "/v1/bids", json={"line_item": "garden", "deadline_ms": 5000, **wish}
    )
    assert answer.status_code == 200, answer.text
    return dict(answer.json())


async def state(client: httpx.AsyncClient) -> dict[str, Any]:
    """The state of the garden."""
    return dict((await client.get("/v1/line-items/garden/state")).json())


def scalar(url: str, statement: str) -> Any:
    """One value, read after the service has let go of its database."""
    engine = create_engine(url)
    with engine.connect() as connection:
        found = connection.execute(text(statement)).scalar_one()
    engine.dispose()
    return found


async def test_from_a_line_item_to_its_lesson(migrated_url: str) -> None:
    """Created, bid, won, valued and learnt over HTTP, with nobody calling the duties."""
    async with serving(migrated_url) as client:
        assert (await client.post("/v1/line-items", json=GARDEN)).status_code == 201
        answer = await bid(client, request_id="op-1")
        assert (answer["bid_cpm"], answer["pass"], answer["request_id"]) == (2, None, "op-1")
        rows = [
            {"ticket": answer["ticket"], "kind": "won", "clearing_cpm": 1.5},
            {"ref": answer["ref"], "kind": "value", "value": "0.05", "event_id": "a"},
        ]
        told = (await client.post("/v1/outcomes", json={"outcomes": rows})).json()
        assert [row["status"] for row in told["results"]] == ["recorded", "recorded"]
        async with asyncio.timeout(5):
            while not (seen := await state(client))["learner"]["wins_with_known_value"]:
                await asyncio.sleep(0.02)
        assert (seen["money"]["spent"], seen["certainty"]["mean"]) == ("0.0015", "0.05")


async def test_a_freeze_is_in_force_by_the_services_own_duties(migrated_url: str) -> None:
    """The order wakes the worker that took it, so it answers long before the next poll."""
    async with serving(migrated_url, BIDKEEL_CHANGE_POLL_MS="10000") as client:
        await client.post("/v1/line-items", json=GARDEN)
        await bid(client)
        answer = (
            await client.post("/v1/line-items/garden/freeze", json={"reason": "a look"})
        ).json()
        assert answer["in_force"] is True
        assert (await bid(client))["pass"] == "frozen"


async def test_a_stop_gives_back_what_was_not_bid(migrated_url: str) -> None:
    """After the last answer only open bids hold money, and no worker is on the list."""
    async with serving(migrated_url) as client:
        await client.post("/v1/line-items", json=GARDEN)
        for _ in range(3):
            await bid(client)
        assert (await state(client))["money"]["held"] != "0.006"
    assert scalar(migrated_url, "SELECT held FROM balance") == 3 * 2_000_000
    assert scalar(migrated_url, "SELECT count(*) FROM worker") == 0
    assert scalar(migrated_url, "SELECT count(*) FROM decision") == 3


async def test_it_is_live_before_it_is_ready(migrated_url: str) -> None:
    """Before its lifespan begins, and after it has ended, no price can leave."""
    app = create_app(load({"BIDKEEL_DATABASE_URL": migrated_url}))
    async with client_of(app) as client:
        assert (await client.get("/health/live")).json() == {"status": "live"}
        assert (await client.get("/health/ready")).status_code == 503
        async with app.router.lifespan_context(app):
            ready = await client.get("/health/ready")
            assert (ready.status_code, ready.json()["status"]) == (200, "ok")
        assert (await client.get("/health/ready")).status_code == 503
        assert (await client.get("/health/live")).status_code == 200


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_it_is_degraded_while_the_database_is_away(migrated_url: str) -> None:
    """Prices leave from the slice in hand, orders and outcomes say come again; then all is well."""
    async with serving(migrated_url) as client:
        await client.post("/v1/line-items", json=GARDEN)
        answer = await bid(client)
        rows = {"outcomes": [{"ticket": answer["ticket"], "kind": "lost"}]}
        with outage(migrated_url):
            ready = await client.get("/health/ready")
            assert (ready.status_code, ready.json()["status"]) == (200, "degraded")
            assert (await bid(client))["bid_cpm"] == 2
            told = await client.post("/v1/outcomes", json=rows)
            assert (told.status_code, "retry-after" in told.headers) == (503, True)
            assert (await client.get("/v1/line-items/garden/state")).status_code == 503
        told = await client.post("/v1/outcomes", json=rows)
        assert told.json()["results"][0]["status"] == "recorded"
        assert (await client.get("/health/ready")).json()["status"] == "ok"


async def test_tickets_of_the_old_key_still_settle(migrated_url: str) -> None:
    """The first key of the settings signs; a ticket of the key before it still settles."""
    old, new = "o" * 32, "n" * 32
    async with serving(migrated_url, BIDKEEL_TICKET_KEYS=old) as client:
        await client.post("/v1/line-items", json=GARDEN)
        ticket = (await bid(client))["ticket"]
    async with serving(migrated_url, BIDKEEL_TICKET_KEYS=f"{new}, {old}") as client:
        assert TicketKeys([new.encode()]).verify((await bid(client))["ticket"]).line_item
        rows = {"outcomes": [{"ticket": ticket, "kind": "lost"}]}
        told = (await client.post("/v1/outcomes", json=rows)).json()
        assert told["results"][0]["status"] == "recorded"


async def test_an_unknown_schema_is_not_served(database_url: str) -> None:
    """Better not to start than to promise on tables that we misread."""
    app = create_app(load({"BIDKEEL_DATABASE_URL": database_url}))
    with pytest.raises(Unsafe):
        async with app.router.lifespan_context(app):
            raise AssertionError("it started")
