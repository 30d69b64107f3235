"""The real app on each database, without a socket, and a look at what it has written."""

from __future__ import annotations

from collections.abc import AsyncIterator, Callable

import httpx
import pytest
from sqlalchemy import create_engine, text

from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys

# What an order or an outcome leaves behind; what a worker writes by itself is not among it.
TABLES = ("line_item", "journal", "freezing", "access_key", "repeat_guard", "quarantine")
STREAM = "stream WHERE kind NOT IN ('lease', 'retire', 'close', 'tick')"

Counts = dict[str, int]


@pytest.fixture
async def app_client(migrated_url: str) -> AsyncIterator[httpx.AsyncClient]:
    """A caller with an admin key before a running service on an empty database."""
    # Many of these bodies take longer to read than an exchange would wait.
    patient = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}
    settings = load({"BIDKEEL_DATABASE_URL": migrated_url, **patient})
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
        yield client


@pytest.fixture
def written(migrated_url: str) -> Callable[[], Counts]:
    """How many rows each table holds that a caller can add to."""

    def count() -> Counts:
        engine = create_engine(migrated_url)
        with engine.connect() as connection:
            # The names are ours, a few lines above.
            counts = {
                table: int(connection.execute(text(f"SELECT count(*) FROM {table}")).scalar_one())  # noqa: S608
                for table in (*TABLES, STREAM)
            }
        engine.dispose()
        return counts

    return count
