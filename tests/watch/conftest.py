"""A browser without a window before the real app: it keeps cookies and fills forms."""

from __future__ import annotations

import re
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass
from html import unescape
from typing import Any

import httpx
import pytest
from fastapi import FastAPI

from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys
from service.store.database import Database

GARDEN: dict[str, Any] = {
    "id": "garden",
    "name": "An invented garden",
    "currency": "EUR",
    "budget": "50.00",
    "daily_budget": "20.00",
    "bid_cap_cpm": 8,
    "flight": {"starts_at": "2026-01-01T00:00:00Z", "time_zone": "Europe/Zurich"},
    "value": {"ceiling": "0.10", "arrival": "once"},
    "policy": {"method": "kl-ucbid"},
    "pacing": {"method": "none"},
}
_FIELD = re.compile(r'<input type="hidden" name="([a-z]+)" value="([^"]*)">')


@dataclass
class Visitor:
    """Somebody before the page, and the service behind it."""

    app: FastAPI
    client: httpx.AsyncClient
    database: Database
    admin: str

    def key(
        self, *scopes: str, line_items: list[str] | None = None, expires_ms: int | None = None
    ) -> tuple[str, str]:
        """A new key: its id and its text."""
        made, bearer = keys.add(
            self.database, "anna", list(scopes), line_items=line_items, expires_ms=expires_ms
        )
        return made.id, bearer

    async def refused(self) -> list[tuple[str, str, str]]:
        """What was counted: key, route and code of each refusal, through the API."""
        # Of the running app: its count is in its memory until it is written down.
        await self.app.state.stories.operator.admitting.flush()
        headers = {"Authorization": f"Bearer {self.admin}"}
        rows = (await self.client.get("/v1/refusals", headers=headers)).json()["refusals"]
        return [(row["key_id"], row["route"], row["code"]) for row in reversed(rows)]

    async def api(self, path: str, body: dict[str, Any]) -> dict[str, Any]:
        """Call the API with the admin key."""
        headers = {"Authorization": f"Bearer {self.admin}"}
        answer = await self.client.post(f"/v1/{path}", json=body, headers=headers)
        assert answer.is_success, answer.text
        return dict(answer.json())

    async def sign_in(self, bearer: str, onward: str = "/watch") -> httpx.Response:
        """Open the door and hand in a key."""
        return await self.send("/watch/sign-in", key=bearer, next=onward)

    async def send(self, path: str, **fields: str) -> httpx.Response:
        """Open a form, fill it and send it, with what is hidden in it."""
        shown = await self.client.get(path)
        return await self.client.post(path, data={**hidden(shown.text, path), **fields})


def hidden(page: str, action: str) -> dict[str, str]:
    """The hidden fields of the form with this action."""
    form = page.split(f'action="{action}"', 1)[1].split("</form>", 1)[0]
    return {name: unescape(text) for name, text in _FIELD.findall(form)}


@asynccontextmanager
async def visiting(url: str, scheme: str = "http") -> AsyncIterator[Visitor]:
    """A visitor before a running service with one line item."""
    # A machine that runs other tests beside this one is slow.
    patient = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}
    settings = load({"BIDKEEL_DATABASE_URL": url, **patient})
    database = open_database(settings)
    _, bearer = keys.add(database, "tests", ["admin"])
    app = create_app(settings)
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url=f"{scheme}://test") as client,
    ):
        visitor = Visitor(app, client, database, bearer)
        await visitor.api("line-items", GARDEN)
        yield visitor
    database.close()


@pytest.fixture
async def visitor(migrated_url: str) -> AsyncIterator[Visitor]:
    """A visitor who has not signed in."""
    async with visiting(migrated_url) as one:
        yield one
