"""A real crew on a real PostgreSQL database, apart so that several files may let one serve."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any, TypeVar

import httpx
import psutil
from sqlalchemy import text

from service.commands.server_process import ServerProcess
from service.store.database import Database

T = TypeVar("T")
NAME = "garden"
CAP = 8_000_000  # Nanos per impression.
PRICE = 2_000_000
GARDEN: dict[str, Any] = {
    "id": NAME,
    "name": "An invented garden",
    "currency": "EUR",
    "budget": "50.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "0.10", "arrival": "once"},
    "policy": {"method": "flat", "price_cpm": 2},
    "pacing": {"method": "none"},
}
PATIENT = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}


class Serving:
    """A crew that serves, with its caller and a look into its database."""

    def __init__(self, server: ServerProcess, database: Database) -> None:
        self.server, self.database = server, database
        self.asked = 0

    def caller(self) -> httpx.Client:
        """A caller with connections of its own and the admin key."""
        headers = {"Authorization": f"Bearer {self.server.key}"}
        return httpx.Client(base_url=self.server.address, headers=headers, timeout=10)

    def create(self, **changes: Any) -> None:
        """Create the garden, or another."""
        with self.caller() as client:
            made = client.post("/v1/line-items", json=GARDEN | changes)
            assert made.status_code == 201, made.text

    def bid(self, client: httpx.Client | None = None, name: str = NAME) -> dict[str, Any]:
        """One answer, by a connection of its own unless a caller is given."""
        if client is None:
            with self.caller() as fresh:
                return self.bid(fresh, name)
        answer = client.post("/v1/bids", json={"line_item": name})
        assert answer.status_code == 200, answer.text
        self.asked += 1
        return dict(answer.json())

    def children(self, role: str) -> list[psutil.Process]:
        """The living children in a role, oldest first."""
        if self.server.child is None:
            return []
        family = psutil.Process(self.server.child.pid).children()
        return [c for c in family if c.status() != psutil.STATUS_ZOMBIE and role in c.cmdline()]

    def one(self, statement: str, **values: Any) -> Any:
        """The first column of the one row that a statement reads."""
        return self.database.read(lambda c: c.execute(text(statement), values).scalar_one())

    def column(self, statement: str, **values: Any) -> list[Any]:
        """The first column of all rows that a statement reads."""
        read = self.database.read
        return list(read(lambda c: c.execute(text(statement), values).scalars().all()))

    def run(self, statement: str, **values: Any) -> None:
        """Change the database behind the service's back."""
        self.database.write(lambda connection: connection.execute(text(statement), values))

    def everybody(self, workers: int) -> None:
        """Wait until so many workers beat, and each has a slice of the garden in its hand."""
        until(lambda: self.one("SELECT count(*) FROM worker") >= workers)
        held = "SELECT count(DISTINCT worker) FROM slice WHERE state = 'open'"

        def all_hold() -> bool:
            self.bid()
            return bool(self.one(held) >= workers)

        until(all_hold)


def until(met: Callable[[], T | None], seconds: float = 30.0) -> T:
    """Wait for something to become true; returns it."""
    end = time.monotonic() + seconds
    while not (found := met()):
        if time.monotonic() > end:
            raise TimeoutError("it did not come true")
        time.sleep(0.02)
    return found


@contextmanager
def crew(url: str, directory: Path, workers: int, **settings: str) -> Iterator[Serving]:
    """So many workers and a clerk on a migrated PostgreSQL database."""
    named = {f"BIDKEEL_{name.upper()}": value for name, value in settings.items()}
    given = {"BIDKEEL_DATABASE_URL": url, "BIDKEEL_WORKERS": str(workers), **PATIENT, **named}
    with ServerProcess(directory, given) as server, closing(Database(url)) as database:
        yield Serving(server, database)
