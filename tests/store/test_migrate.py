"""The schema comes up on both databases, and its constraints really refuse."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise, StoreAway, Unsafe
from service.store import keys
from service.store.chain import verify
from service.store.database import Database
from service.store.facts import fact
from service.store.migrate import is_empty, migrate, require_current, upgrade
from tests.builders import outage

ITEM = "INSERT INTO line_item VALUES ('a', '{}', 1, 1, 1)"
BALANCE = "INSERT INTO balance VALUES ('a', {}, {}, {}, {}, {}, {}, {}, 1)"
SLICE = (
    "INSERT INTO slice VALUES ({bytes}, 'a', 'w', '2026-12-01', {amount}, {remaining}, {owed},"
    " 0, 0, '{state}', 1, 2, 3, 4)"
)


@pytest.fixture(name="empty")
def _empty(database_url: str) -> Iterator[Database]:
    database = Database(database_url)
    yield database
    database.close()


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    database.write(lambda connection: connection.execute(text(ITEM)))
    yield database
    database.close()


def test_an_empty_database_is_brought_to_this_release(empty: Database, database_url: str) -> None:
    """Before, we refuse to work with it; after, we do, and a second time changes nothing."""
    assert is_empty(empty)
    with pytest.raises(Unsafe):
        require_current(empty)
    migrate(database_url)
    first = empty.read(lambda connection: fact(connection, "incarnation"))
    migrate(database_url)

    require_current(empty)
    assert not is_empty(empty)
    assert empty.read(lambda connection: fact(connection, "incarnation")) == first


def test_a_database_of_a_newer_release_is_refused(database: Database) -> None:
    """Old code must not misread what newer code has written."""
    newer = text("UPDATE alembic_version SET version_num = '9999'")
    database.write(lambda connection: connection.execute(newer))

    with pytest.raises(Unsafe, match="9999"):
        require_current(database)


def test_every_money_column_is_filled(database: Database) -> None:
    """A CHECK passes on an unknown, so no column of money or time may be empty."""
    for table in ("balance", "local_day", "slice"):
        assert nullable(database, table) == []
    assert nullable(database, "stream") == ["bid", "slot"]


@pytest.mark.parametrize(
    ("values", "why"),
    [
        ((10, 10, 6, 5, 0, 0, 0), "spent + held above the budget"),
        ((10, 11, 0, 0, 0, 0, 0), "a target above the budget"),
        ((10, 10, -1, 0, 0, 0, 0), "negative spend"),
        ((10, 10, 0, -1, 0, 0, 0), "negative hold"),
        ((10, 10, 0, 0, -1, 0, 0), "negative unfunded"),
        ((10, 10, 0, 0, 0, -1, 0), "negative disputed"),
        ((10, 10, 0, 0, 0, 0, -1), "negative seq"),
        ((10, 10, "NULL", 0, 0, 0, 0), "nothing for spend"),
        ((10, 10, "'abc'", 0, 0, 0, 0), "text for money"),
    ],
)
def test_a_balance_that_breaks_the_promise_is_refused(
    database: Database, values: tuple[object, ...], why: str
) -> None:
    """The database itself says no, whatever the code above it does."""
    refused(database, BALANCE.format(*values), why)


@pytest.mark.parametrize(
    "row",
    [
        {"amount": 0, "remaining": 0, "owed": 0, "state": "open"},
        {"amount": 5, "remaining": -1, "owed": 0, "state": "open"},
        {"amount": 5, "remaining": 3, "owed": 3, "state": "open"},
        {"amount": 5, "remaining": 1, "owed": 0, "state": "closed"},
        {"amount": 5, "remaining": 1, "owed": 0, "state": "gone"},
    ],
)
def test_an_impossible_slice_is_refused(database: Database, row: dict[str, object]) -> None:
    """A slice holds at least nothing, at most its amount, and nothing once closed."""
    refused(database, SLICE.format(bytes=sixteen(database), **row), str(row))


def test_a_slice_has_an_id_of_sixteen_bytes(database: Database) -> None:
    """A shorter id would make bid ids that collide."""
    row = {"amount": 5, "remaining": 5, "owed": 0, "state": "open"}
    refused(database, SLICE.format(bytes=sixteen(database, count=15), **row), "a short id")


def test_a_slot_of_a_bid_is_filled_once(database: Database) -> None:
    """The second row in the same slot of the same bid is impossible."""
    row = "INSERT INTO stream VALUES ('a', {}, 'won', 1, 1, {}, 'result', 0, '{{}}')"
    database.write(lambda c: c.execute(text(row.format(1, sixteen(database)))))
    refused(database, row.format(2, sixteen(database)), "a slot filled twice")


def refused(database: Database, statement: str, why: str) -> None:
    """Hold that a statement is refused."""
    try:
        database.write(lambda connection: connection.execute(text(statement)))
    except BrokenPromise:
        return
    pytest.fail(f"the database took {why}")


def sixteen(database: Database, count: int = 16) -> str:
    """So many bytes as a literal of the database at hand."""
    digits = "ab" * count
    return f"X'{digits}'" if database.is_sqlite else f"'\\x{digits}'"


def nullable(database: Database, table: str) -> list[str]:
    """The columns of a table that may be empty."""
    if database.is_sqlite:
        rows = database.read(lambda c: c.execute(text(f"PRAGMA table_info({table})")).all())
        return sorted(row.name for row in rows if not row.notnull and not row.pk)
    found = text(
        "SELECT column_name FROM information_schema.columns WHERE table_name = :table"
        " AND table_schema = 'public' AND is_nullable = 'YES'"
    )
    rows = database.read(lambda c: c.execute(found, {"table": table}).all())
    return sorted(row.column_name for row in rows)


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
def test_a_database_that_does_not_answer_is_away(migrated_url: str) -> None:
    """A start beside a database that is starting itself gets a sentence, not a trace."""
    database = Database(migrated_url)
    with outage(migrated_url), pytest.raises(StoreAway):
        is_empty(database)
    with outage(migrated_url), pytest.raises(StoreAway):
        require_current(database)
    database.close()


def test_a_database_of_the_first_release_is_brought_along(
    empty: Database, database_url: str
) -> None:
    """Its keys still open, its journal is sealed and guarded, its workers may write on beside."""
    noted = (
        "INSERT INTO journal (at_ms, actor, action, line_item, reason, detail)"
        " VALUES (7, 'tester', 'freeze', 'a', 'a look', '{}')"
    )
    with empty.engine.begin() as connection:
        upgrade(connection, "0001")
        for statement in (
            noted,
            noted,
            "INSERT INTO worker (id, started_ms, beat_ms, change_seen) VALUES ('old', 1, 1, 1)",
        ):
            connection.execute(text(statement))
        connection.execute(
            text(
                "INSERT INTO access_key (id, name, hash, scopes, created_ms)"
                " VALUES ('k', 'desk', :hash, 'bid read', 1)"
            ),
            {"hash": keys.hashed("a text")},
        )
    migrate(database_url)

    sealed = empty.read(verify)
    assert (sealed.rows, sealed.adopted, sealed.broken) == (2, 2, None)
    found = empty.read(lambda c: keys.by_bearer(c, "a text"))
    assert found == keys.Key("k", "desk", frozenset({"bid", "read"}))
    refused(empty, "DELETE FROM journal", "a journal with a row less")
    empty.write(lambda c: c.execute(text(noted)))
    waiting = empty.read(verify)
    assert (waiting.unsealed, waiting.broken) == (1, None)
    keys.end(empty, "k")
    assert (empty.read(verify).adopted, empty.read(verify).rows) == (3, 4)
