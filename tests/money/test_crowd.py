"""Eight threads on one line item: the promise at every read, the books equal to the nano."""

from __future__ import annotations

import secrets
import threading
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from dataclasses import dataclass, field
from typing import Any

import numpy
import pytest
from sqlalchemy import text

from service.guard.hand import SliceInHand
from service.ledger.settle import Outcome
from service.store import leases, line_items, outcomes, workers
from service.store.audit import audit
from service.store.bookings import Booking
from service.store.database import Database, Reading, Writing
from service.store.learners import begin
from service.store.leases import Leased, LeaseRequest, Report
from tests.builders import FLAT, UNIT

THREADS = 8
ROUNDS = 20
BIDS_MAX = 12
CAP = 8_000_000


@dataclass
class Buyer:
    """One worker with a hand of its own, and what the exchange charged through it."""

    database: Database
    name: str
    generator: numpy.random.Generator
    charged: int = 0
    denied: int = 0
    waiting: list[Booking] = field(default_factory=list)

    def play(self) -> None:
        """Lease, bid, settle (some of it twice), give back; again and again."""
        for _ in range(ROUNDS):
            held = self._lease()
            if held is None:
                self.denied += 1
                self._settle()
                continue
            for _ in range(int(self.generator.integers(1, BIDS_MAX))):
                self._bid(held)
            report = Report(held.line_item, held.id, held.bids, 0, held.issued)
            if self.generator.random() < 0.5:
                self._settle()
            leases.retire(self.database, [report] * int(self.generator.integers(1, 3)))
        self._settle()

    def _lease(self) -> SliceInHand | None:
        request = LeaseRequest(FLAT["id"], secrets.token_bytes(16), CAP * BIDS_MAX, CAP)
        leased = leases.lease(self.database, self.name, [request], 30)[0]
        if not isinstance(leased, Leased):
            return None
        return SliceInHand(leased.slice_id, FLAT["id"], leased.amount, 1, 0.0, 30.0)

    def _bid(self, held: SliceInHand) -> None:
        price = int(self.generator.integers(1, CAP))
        if price > held.free:
            return
        counter = held.take(price)
        bid = (int.from_bytes(held.id) + counter).to_bytes(17)[-16:]
        kind = ("won", "won", "lost", "void")[int(self.generator.integers(4))]
        cost = int(self.generator.integers(0, price + 1)) if kind == "won" else None
        outcome = Outcome(kind, bid, counter, price, "north", cost)
        self.charged += cost or 0
        self.waiting.append(Booking(FLAT["id"], outcome, held.id))

    def _settle(self) -> None:
        rows, self.waiting = self.waiting, []
        if not rows:
            return
        again = rows[: len(rows) // 2]
        statuses = [b.status for b in outcomes.book(self.database, rows + again)]
        if statuses != ["recorded"] * len(rows) + ["duplicate"] * len(again):
            raise ValueError(f"unexpected: {statuses}")


@pytest.mark.parametrize(
    ("budget", "daily_budget"), [(UNIT // 5, None), (UNIT, UNIT // 8)], ids=["total", "daily"]
)
def test_spent_plus_held_never_passes_the_budget_at_any_read(
    migrated_url: str, budget: int, daily_budget: int | None
) -> None:
    """Whatever eight buyers do at once, every read shows the promise kept and the end agrees."""
    limit = daily_budget or budget
    config = {**FLAT, "budget": budget, "daily_budget": daily_budget, "bid_cap": CAP}
    with closing(Database(migrated_url, pool_size=12)) as database:
        database.write(lambda connection: _create(connection, config))
        buyers, seen = _crowd(database)
        spent, held = database.read(_balance)
        found = database.read(audit)
    assert max(seen) <= limit
    assert limit * 0.9 < max(seen)
    assert len(seen) > 20
    assert (spent, held) == (sum(buyer.charged for buyer in buyers), 0)
    assert any(buyer.denied for buyer in buyers)
    assert found == []


def _crowd(database: Database) -> tuple[list[Buyer], list[int]]:
    """Let eight buyers play at once; returns them and spent + held at every read."""
    buyers = [Buyer(database, f"w{n}", numpy.random.default_rng(n)) for n in range(THREADS)]
    database.write(lambda connection: _beat(connection, buyers))
    seen, stop = _watch(database)
    with ThreadPoolExecutor(THREADS) as pool:
        done = [pool.submit(buyer.play) for buyer in buyers]
        for one in done:
            one.result()
    stop()
    return buyers, seen


def _beat(connection: Writing, buyers: list[Buyer]) -> None:
    for buyer in buyers:
        workers.beat(connection, buyer.name, 0, 1)


def _create(connection: Any, config: dict[str, Any]) -> None:
    line_items.create(connection, config, 1_796_000_000_000)
    begin(connection, config["id"], b"{}", 1)


def _balance(connection: Reading) -> tuple[int, int]:
    row = connection.execute(text("SELECT spent, held FROM balance")).one()
    return row.spent, row.held


def _watch(database: Database) -> tuple[list[int], Callable[[], None]]:
    """Read the balance without pause in a thread of its own until told to stop."""
    seen: list[int] = []
    over = threading.Event()

    def look() -> None:
        while not over.is_set():
            seen.append(sum(database.read(_balance)))

    watcher = threading.Thread(target=look)
    watcher.start()

    def stop() -> None:
        over.set()
        watcher.join()

    return seen, stop
