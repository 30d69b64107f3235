"""Change numbers have no gaps, whoever writes at once, and late committers are not missed."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor

import pytest

from service.store import changes, workers
from service.store.database import Database, Reading

WRITERS = 8
ANNOUNCED = 12


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, pool_size=WRITERS + 1)
    yield database
    database.close()


def test_numbers_follow_one_another(database: Database) -> None:
    """Two changes in one transaction take two numbers, the next transaction the third."""
    database.write(lambda connection: changes.announce(connection, "snapshot", ["a", "b"]))
    last = database.write(lambda connection: changes.announce(connection, "freeze", ["a"]))

    assert last == 3
    assert database.read(changes.latest) == 3
    assert database.read(lambda connection: changes.since(connection, 1)) == [
        (2, "snapshot", "b"),
        (3, "freeze", "a"),
    ]


def test_a_transaction_that_fails_takes_no_number(database: Database) -> None:
    """A number that was rolled back is given to the next change."""

    def fails(connection: object) -> None:
        changes.announce(connection, "snapshot", ["a"])  # type: ignore[arg-type]
        raise KeyError("after the number was taken")

    with pytest.raises(KeyError):
        database.write(fails)
    assert database.write(lambda connection: changes.announce(connection, "x", ["b"])) == 1


def test_a_reader_that_follows_misses_no_change(database: Database) -> None:
    """While eight writers announce, a poller that asks above its last sees every number once."""
    seen: list[int] = []
    over = threading.Event()

    def follow() -> None:
        while not over.is_set() or seen[-1:] != [WRITERS * ANNOUNCED]:
            seen.extend(database.read(lambda c: _numbers_after(c, seen[-1] if seen else 0)))

    def announce(writer: int) -> None:
        for _ in range(ANNOUNCED):
            database.write(lambda c: changes.announce(c, "snapshot", [f"item-{writer}"]))

    with ThreadPoolExecutor(WRITERS + 1) as pool:
        following = pool.submit(follow)
        for done in [pool.submit(announce, writer) for writer in range(WRITERS)]:
            done.result()
        over.set()
        following.result(timeout=30)

    assert seen == list(range(1, WRITERS * ANNOUNCED + 1))


def _numbers_after(connection: Reading, last: int) -> list[int]:
    return [number for number, _, _ in changes.since(connection, last)]


def test_what_every_worker_has_passed_may_be_forgotten(database: Database) -> None:
    """Pruning removes what all have read, never the newest, and leaves the counter where it is."""
    database.write(lambda connection: changes.announce(connection, "x", ["a", "b", "c"]))
    database.write(lambda connection: workers.beat(connection, "fast", 3, 1))
    database.write(lambda connection: workers.beat(connection, "slow", 1, 1))
    database.write(changes.prune)
    assert database.read(lambda c: _numbers_after(c, 0)) == [2, 3]

    database.write(lambda connection: workers.leave(connection, "slow"))
    database.write(changes.prune)
    assert database.read(lambda connection: changes.since(connection, 0)) == [(3, "x", "c")]
    assert database.write(lambda connection: changes.announce(connection, "x", ["d"])) == 4
