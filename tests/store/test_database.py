"""Transactions are whole, readers see one moment, and an absent database is named as such."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from pathlib import Path

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise, StoreAway, Unsafe
from service.store import database
from service.store.changes import announce, latest
from service.store.database import Database, Reading, Writing, locking


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def test_what_fails_half_way_leaves_nothing(database: Database) -> None:
    """An exception inside a transaction undoes all that came before it."""

    def half(connection: Writing) -> None:
        announce(connection, "x", ["a"])
        raise LookupError("half way")

    with pytest.raises(LookupError):
        database.write(half)
    assert database.read(latest) == 0


def test_a_refused_row_is_a_broken_promise(database: Database) -> None:
    """What a constraint refuses is told in our own words, not the driver's."""
    wrong = text("UPDATE service_clock SET now_ms = -1")
    with pytest.raises(BrokenPromise):
        database.write(lambda connection: connection.execute(wrong))


def test_a_reader_sees_one_moment(database: Database) -> None:
    """A write that commits between two statements of a reader is not seen by the second."""
    written = threading.Event()

    def look(connection: Reading) -> tuple[int, int]:
        first = latest(connection)
        with ThreadPoolExecutor(1) as pool:
            pool.submit(database.write, lambda c: announce(c, "x", ["a"])).result()
        written.set()
        return first, latest(connection)

    assert database.read(look) == (0, 0)
    assert written.is_set()
    assert database.read(latest) == 1


def test_writers_at_once_all_get_through(database: Database) -> None:
    """Eight threads that write the same row lose no update."""
    with ThreadPoolExecutor(8) as pool:
        numbers = list(
            pool.map(lambda n: database.write(lambda c: announce(c, "x", [str(n)])), range(64))
        )
    assert sorted(numbers) == list(range(1, 65))


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
def test_a_deadlock_is_tried_again(database: Database) -> None:
    """Two transactions that lock crosswise both succeed in the end, each done once."""
    for name in ("a", "b"):
        database.write(_insert(name))
    both_hold_one = threading.Barrier(2)
    tries: list[str] = []

    def cross(first: str, second: str) -> Callable[[Writing], None]:
        def work(connection: Writing) -> None:
            tries.append(first)
            _bump(connection, first)
            if len(tries) <= 2:
                both_hold_one.wait(timeout=10)
            _bump(connection, second)

        return work

    with ThreadPoolExecutor(2) as pool:
        done = [pool.submit(database.write, cross(*names)) for names in ("ab", "ba")]
        for one in done:
            one.result(timeout=30)

    values = database.read(lambda c: c.execute(text("SELECT value FROM fact ORDER BY name")).all())
    assert [row.value for row in values if row.value.startswith("n")] == ["nxx", "nxx"]
    assert len(tries) == 3


def test_an_absent_database_is_away(tmp_path: Path) -> None:
    """A server that nobody runs and a folder that is not there are both StoreAway."""
    nowhere = f"postgresql+psycopg://nobody@/none?host={tmp_path}"
    for url in (nowhere, f"sqlite:///{tmp_path}/no/such/folder/b.db"):
        database = Database(url)
        with pytest.raises(StoreAway):
            database.read(latest)
        with pytest.raises(StoreAway):
            database.write(lambda connection: announce(connection, "x", ["a"]))
        database.close()


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_every_sqlite_connection_is_durable(database: Database) -> None:
    """Each connection of the pool waits for the disk and holds foreign keys."""
    wanted = {"journal_mode": "wal", "synchronous": 2, "foreign_keys": 1, "busy_timeout": 5000}
    engine = database.engine.execution_options(reading=True)
    with engine.connect() as one, engine.connect() as two:
        for connection in (one, two):
            found = {
                name: connection.execute(text(f"PRAGMA {name}")).scalar_one() for name in wanted
            }
            assert found == wanted


def test_a_safe_database_is_taken(database: Database) -> None:
    """Both databases as we set them up pass the check."""
    database.check_safe()


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_an_unsafe_database_is_refused(database: Database) -> None:
    """A connection that would not wait for the disk stops the start."""
    with database.engine.connect() as connection:
        connection.exec_driver_sql("ROLLBACK")
        connection.exec_driver_sql("PRAGMA synchronous=NORMAL")
    with pytest.raises(Unsafe):
        database.check_safe()


def test_the_row_lock_is_spoken_where_it_is_understood(database: Database) -> None:
    """PostgreSQL locks rows, SQLite has locked everything already."""
    with database.engine.connect() as connection:
        statement = str(locking(connection, "SELECT 1", skip=True))
    expected = "SELECT 1" if database.is_sqlite else "SELECT 1 FOR NO KEY UPDATE SKIP LOCKED"
    assert statement == expected


def _insert(name: str) -> Callable[[Writing], object]:
    row = {"name": name, "value": "n"}
    return lambda c: c.execute(text("INSERT INTO fact VALUES (:name, :value)"), row)


def _bump(connection: Writing, name: str) -> None:
    statement = text("UPDATE fact SET value = value || 'x' WHERE name = :name")
    connection.execute(statement, {"name": name})


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_a_writer_waits_for_its_turn_and_then_says_that_none_came(
    migrated_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Another process holds SQLite's one lock: for a while is waited for, for long is told."""
    monkeypatch.setattr(database, "BUSY_S", 1)
    # A second object is to SQLite what a second process is: it shares no lock of ours.
    with closing(Database(migrated_url)) as one, closing(Database(migrated_url)) as other:
        begun, leave = threading.Event(), threading.Event()

        def hold(connection: Writing) -> None:
            announce(connection, "x", ["a"])
            begun.set()
            leave.wait(30)

        with ThreadPoolExecutor(2) as pool:
            held = pool.submit(one.write, hold)
            begun.wait(30)
            with pytest.raises(StoreAway):
                other.write(lambda connection: announce(connection, "x", ["b"]))
            waiting = pool.submit(other.write, lambda c: announce(c, "x", ["c"]))
            leave.set()
            assert (held.result(), waiting.result()) == (None, 2)
