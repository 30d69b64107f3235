"""Heartbeats in service time say who is alive and how far each has read."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from sqlalchemy import text

from service.store import clock, workers
from service.store.database import Database
from service.store.leases import LeaseRequest, lease
from tests.builders import NAME, begin


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def pass_time(database: Database, ms: int) -> None:
    """Let service time move on, in one step as large as it takes."""
    start = database.read(clock.now_ms)
    database.write(lambda c: clock.advance(c, 10**13 + start, 0))
    database.write(lambda c: clock.advance(c, 10**13 + start + ms, ms))


def test_a_worker_that_beats_is_live(database: Database) -> None:
    """Its last word on the changes it has passed is the one that counts."""
    database.write(lambda connection: workers.beat(connection, "w", 3, 1))
    database.write(lambda connection: workers.beat(connection, "w", 5, 2))
    assert database.read(workers.live) == {"w": 5}


def test_a_silent_worker_counts_as_gone(database: Database) -> None:
    """After ten seconds of service time without a beat nobody waits for it any more."""
    database.write(lambda connection: workers.beat(connection, "w", 3, 1))
    pass_time(database, workers.LIVE_MS - 1)
    assert database.read(workers.live) == {"w": 3}

    pass_time(database, 1)
    assert database.read(workers.live) == {}


def test_a_worker_that_leaves_is_off_the_list(database: Database) -> None:
    """It takes only itself off."""
    for name in ("w", "v"):
        database.write(lambda connection, name=name: workers.beat(connection, name, 0, 1))  # type: ignore[misc]
    database.write(lambda connection: workers.leave(connection, "w"))
    assert database.read(workers.live) == {"v": 0}


def test_a_silent_worker_with_a_slice_may_still_wake_up(database: Database) -> None:
    """It is bound by a freeze until its slice is over, or somebody has seen it dead."""
    begin(database)
    database.write(lambda connection: workers.beat(connection, "w", 3, 1))
    lease(database, "w", [LeaseRequest(NAME, bytes(16), 1, 0)], 30)
    pass_time(database, workers.LIVE_MS)
    assert (database.read(workers.live), database.read(workers.bound)) == ({}, {"w": 3})
    pass_time(database, 20_000)
    assert database.read(workers.bound) == {}

    database.write(lambda connection: workers.beat(connection, "w", 4, 1))
    assert database.read(workers.bound) == {"w": 4}
    database.write(lambda connection: workers.leave(connection, "w"))
    assert database.read(workers.bound) == {}


def test_rows_of_workers_long_gone_are_forgotten(database: Database) -> None:
    """A crash loop leaves a row with each start; a day later they are gone, the live one stays."""
    database.write(lambda connection: workers.beat(connection, "old", 3, 1))
    pass_time(database, workers.FORGET_MS + 1)
    database.write(lambda connection: workers.beat(connection, "new", 3, 1))
    database.write(workers.prune)
    rows = database.read(lambda c: c.execute(text("SELECT id FROM worker")).scalars().all())
    assert rows == ["new"]
