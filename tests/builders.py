"""Small builders of what most tests of the stories need: a line item, a worker driven by hand.

Apart from conftest.py, so that a test sees in its own lines what it builds and when time passes.
"""

from __future__ import annotations

import asyncio
import contextlib
import time
from collections.abc import AsyncIterator, Iterator
from contextlib import asynccontextmanager, contextmanager
from dataclasses import dataclass
from typing import Any

import psycopg
from sqlalchemy import text
from sqlalchemy.engine import make_url

from service.backlog import Backlog
from service.bidding import Answer, Bidder, Clocks
from service.catalog import Catalog
from service.clerk import Clerk, Habits
from service.decision.opportunity import Opportunity
from service.feedback import Feedback, Receipt, Report, Room
from service.guard.ticket import TicketKeys
from service.leasing import Leasing
from service.ledger.entries import Entry
from service.operating import Operator
from service.store import clock as service_clock
from service.store import learners, line_items
from service.store.audit import Finding, audit
from service.store.books import Books
from service.store.database import Database, Writing
from service.store.facts import fact
from service.teaching import FRESH
from service.threads import Threads
from service.upkeep import Rhythm, Upkeep

NAME = "garden"
UNIT = 10**9  # Nanos in one unit of currency.
PRICE = 1_000_000  # What the flat line item bids: 1 CPM, in nanos per impression.
CAP = 8_000_000
LEASE_S = 30
GRACE_MS = 900_000

FLAT: dict[str, Any] = {
    "id": NAME,
    "name": "An invented garden",
    "currency": "EUR",
    "budget": UNIT,
    "daily_budget": None,
    "bid_cap": CAP,
    "auction": "second",
    "flight": {"starts_ms": 0, "ends_ms": None, "time_zone": "Europe/Zurich"},
    "spend_on": "won",
    "grace_ms": GRACE_MS,
    "billing_grace_ms": 86_400_000,
    "strict": False,
    "value": {
        "ceiling": 100_000_000,
        "typical": 20_000_000,
        "arrival": "once",
        "window_ms": 60_000,
        "delay_mean_ms": None,
        "expected": {"per_impression": 4_000_000, "conversions": 1},
    },
    "policy": {"method": "flat", "price": PRICE},
    "pacing": {"method": "none"},
}


def line_item(**changes: Any) -> dict[str, Any]:
    """A flat line item in the internal form; changed objects are merged, all but the policy."""
    built = dict(FLAT)
    for name, value in changes.items():
        merge = isinstance(value, dict) and name in ("flight", "value")
        built[name] = {**built[name], **value} if merge else value
    return built


class BootClock:
    """A boot-time clock that stands still until a test moves it."""

    def __init__(self) -> None:
        self.now = 1000.0

    def __call__(self) -> float:
        return self.now


@dataclass
class Worker:
    """One worker whose money and outcome tasks run, and whose upkeep a test does by hand."""

    database: Database
    threads: Threads
    clock: BootClock
    catalog: Catalog
    leasing: Leasing
    backlog: Backlog
    bidder: Bidder
    feedback: Feedback
    operator: Operator
    upkeep: Upkeep
    clerk: Clerk

    async def create(self, **changes: Any) -> None:
        """Create the flat line item, or another."""
        await self.operator.create(line_item(**changes), None, "tester")

    async def bid(self, name: str = NAME, **wish: Any) -> Answer:
        """Ask for one price, with time enough for a slow machine."""
        opportunity = Opportunity(name, **{"deadline_ms": 5000, **wish})
        return await self.bidder.bid(opportunity, time.monotonic())

    async def bids(self, count: int, name: str = NAME) -> list[Answer]:
        """So many bids one after the other, each with its ticket."""
        answers = [await self.bid(name) for _ in range(count)]
        if any(answer.ticket is None for answer in answers):
            raise ValueError(f"a pass among them: {[answer.reason for answer in answers]}")
        return answers

    async def report(self, *reports: Report) -> list[Receipt]:
        """Report outcomes in one call."""
        return await self.feedback.report(list(reports))

    async def learn(self) -> None:
        """Fold what is new, and take it up."""
        await self.clerk.teach()
        await self.upkeep.follow()

    async def keep_time(self) -> None:
        """Let a beat pass, and close what it made due."""
        await self.upkeep.keep_time()
        await self.clerk.close()

    async def stop(self) -> None:
        """Give everything back, as on SIGTERM."""
        await self.upkeep.stop()

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

    def balance(self, name: str = NAME) -> dict[str, int]:
        """The balance row of a line item."""
        statement = text("SELECT * FROM balance WHERE line_item = :name")
        row = self.database.read(lambda c: c.execute(statement, {"name": name}).one())
        return dict(row._mapping)

    def audit(self) -> list[Finding]:
        """What the audit finds."""
        return self.database.read(audit)

    def pass_service_ms(self, milliseconds: int) -> None:
        """Let service time pass, as if the workers had been up for so long."""
        pass_service_ms(self.database, milliseconds)


def pass_service_ms(database: Database, milliseconds: int) -> None:
    """Let service time pass in one step."""
    seen = text("SELECT seen_ms FROM service_clock")

    def work(connection: Any) -> int:
        wall_ms = connection.execute(seen).scalar_one() + milliseconds
        return service_clock.advance(connection, wall_ms, milliseconds)

    database.write(work)


@asynccontextmanager
async def working(
    url: str,
    worker: str = "one",
    *,
    lease_s: int = LEASE_S,
    queue_max: int = 1000,
    incarnation: bytes | None = None,
    waiting_max: int = 200,
    room: Room | None = None,
) -> AsyncIterator[Worker]:
    """A worker on a migrated database; its leasing and feedback run, its upkeep waits for calls."""
    database, threads = Database(url), Threads(6)
    keys = TicketKeys([bytes.fromhex(database.read(lambda c: fact(c, "ticket_key")))])
    here = incarnation or bytes.fromhex(database.read(lambda c: fact(c, "incarnation")))
    clock, news = BootClock(), asyncio.Event()
    catalog = Catalog(database, threads)
    # Gathered for no time, so that a test knows when a slice has come.
    leasing = Leasing(database, threads, worker, lease_s, clock, gather_s=0.0)
    backlog = Backlog(queue_max)
    clocks = Clocks(100, 5000, waiting_max)
    feature_key = bytes.fromhex(database.read(lambda c: fact(c, "feature_key")))
    bidder = Bidder(catalog, leasing, keys, here, clocks, backlog, feature_key)
    feedback = Feedback(database, threads, keys, here, room)
    operator = Operator(database, threads, catalog, news, 10)
    upkeep = Upkeep(
        *(database, threads, worker, catalog, leasing, backlog, news, Rhythm(250, 10, 2000))
    )
    clerk = Clerk(database, threads, Habits(200, 10, 30, 2, 90, 7))
    await upkeep.start()
    await clerk.start()
    tasks = [asyncio.create_task(leasing.run()), asyncio.create_task(feedback.run())]
    try:
        yield Worker(
            *(database, threads, clock, catalog, leasing, backlog),
            *(bidder, feedback, operator, upkeep, clerk),
        )
    finally:
        await _end(tasks)
        threads.close()
        database.close()


async def _end(tasks: list[asyncio.Task[None]]) -> None:
    for task in tasks:
        task.cancel()
    await asyncio.gather(*tasks, return_exceptions=True)


@asynccontextmanager
async def running_beside(worker: Worker, every_s: float = 0.02) -> AsyncIterator[None]:
    """Let a worker follow changes by itself, as its own loop would."""

    async def follow() -> None:
        while True:
            await worker.upkeep.follow()
            await asyncio.sleep(every_s)

    task = asyncio.create_task(follow())
    try:
        yield
    finally:
        await _end([task])


@contextmanager
def outage(url: str) -> Iterator[None]:
    """Let a PostgreSQL database end its connections and turn new ones away."""
    parts = make_url(url)
    host = str(parts.query["host"])
    with psycopg.connect(host=host, user="postgres", dbname="postgres", autocommit=True) as admin:
        allow = f'ALTER DATABASE "{parts.database}" WITH ALLOW_CONNECTIONS '
        admin.execute((allow + "false").encode())
        end = "SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE datname = %s"
        admin.execute(end, [parts.database])
        try:
            yield
        finally:
            with contextlib.suppress(psycopg.errors.UndefinedObject):
                admin.execute((allow + "true").encode())


def begin(database: Database, **changes: Any) -> str:
    """Put a line item with its learner straight into the store; returns its id."""
    built = line_item(**changes)

    def work(connection: Writing) -> None:
        line_items.create(connection, built, 1)
        learners.begin(connection, built["id"], FRESH, 1)

    database.write(work)
    return str(built["id"])


def append(database: Database, *entries: Entry, name: str = NAME) -> int:
    """Append entries to a stream under its lock; returns the last seq."""

    def work(connection: Writing) -> int:
        books = Books(connection, [name], database.wall_ms())
        for entry in entries:
            books.post(name, entry)
        books.save()
        return books.accounts[name].seq

    return database.write(work)


def won(number: int, price: int = PRICE) -> Entry:
    """The entry of a win that no slice stands behind."""
    body = {"price": price, "bid": price, "source": "default", "round": 1, "late": False}
    return Entry("won", body, number.to_bytes(16), "result")


def valued(number: int, amount: int, event: str = "a", was: int | None = None) -> Entry:
    """The entry of a value of that win."""
    body = {"event_id": event, "amount": amount, "was": was, "corrects": None}
    return Entry("value", body, number.to_bytes(16), f"value:{event}")
