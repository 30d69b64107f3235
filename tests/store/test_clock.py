"""Service time moves on by small steps, never back, and by one worker at a time."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor

import pytest

from service.store import clock
from service.store.database import Database, Writing

START_MS = 1_796_000_000_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def tick(database: Database, wall_ms: int) -> int:
    """One step of upkeep, in a transaction of its own."""
    return database.write(lambda connection: clock.advance(connection, wall_ms))


def test_the_first_step_is_a_step_like_any_other(database: Database) -> None:
    """A new database has seen no wall clock yet, and its time begins at zero."""
    assert database.read(clock.now_ms) == 0
    assert tick(database, START_MS) == clock.STEP_MS_MAX == 2000
    assert database.read(clock.now_ms) == 2000


@pytest.mark.parametrize(
    ("wall_ms", "step_ms"),
    [
        *((0, 0), (1, 1), (1000, 1000), (1999, 1999), (2000, 2000), (2001, 2000)),
        *((86_400_000, 2000), (-1, 0), (-86_400_000, 0)),
    ],
)
def test_a_step_is_what_the_wall_clock_shows_within_bounds(
    database: Database, wall_ms: int, step_ms: int
) -> None:
    """At most two seconds after however long an outage, and never back."""
    before = tick(database, START_MS)
    assert tick(database, START_MS + wall_ms) - before == step_ms
    assert database.read(clock.now_ms) - before == step_ms


def test_time_goes_on_from_a_wall_clock_that_was_set_back(database: Database) -> None:
    """It stands still at the jump, and the next second counts again."""
    times = [tick(database, START_MS + ms) for ms in (0, -3_600_000, -3_599_000, -3_598_000)]
    assert [later - times[0] for later in times] == [0, 0, 1000, 2000]


def test_a_long_history_never_runs_faster_than_the_wall_clock(database: Database) -> None:
    """Many small steps add up to exactly the time that went by."""
    before = tick(database, START_MS)
    for second in range(1, 31):
        tick(database, START_MS + 1000 * second)
        tick(database, START_MS + 1000 * second)
    assert database.read(clock.now_ms) - before == 30_000


def test_of_workers_that_tick_at_once_one_moves_the_clock(database: Database) -> None:
    """Both see the same second go by, and it is counted once."""
    before, inside, leave = tick(database, START_MS), threading.Event(), threading.Event()

    def slowly(connection: Writing) -> None:
        clock.advance(connection, START_MS + 1500)
        inside.set()
        leave.wait(10)

    with ThreadPoolExecutor(2) as pool:
        first = pool.submit(database.write, slowly)
        inside.wait(10)
        second = pool.submit(tick, database, START_MS + 1600)
        with pytest.raises(TimeoutError):
            second.result(0.2)
        leave.set()
        first.result()
        second.result()
    assert database.read(clock.now_ms) - before in (1500, 1600)


def test_a_step_that_is_rolled_back_did_not_happen(database: Database) -> None:
    """Time belongs to the transaction that moves it."""
    before = tick(database, START_MS)

    def fails(connection: object) -> None:
        clock.advance(connection, START_MS + 1000)  # type: ignore[arg-type]
        raise KeyError("the work failed")

    with pytest.raises(KeyError):
        database.write(fails)
    assert database.read(clock.now_ms) == before


def test_all_workers_of_a_database_share_one_wall_clock(database: Database) -> None:
    """On PostgreSQL the server's, whatever a worker's own shows; on SQLite there is one worker."""
    database.wall_ms = lambda: 7
    shown = database.write(lambda connection: clock.wall_clock(connection, database))
    if database.is_sqlite:
        assert shown == 7
    else:
        assert abs(shown - time.time() * 1000) < 60_000
