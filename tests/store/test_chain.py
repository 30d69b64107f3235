"""The journal's chain: what anybody does to a row afterwards is seen, and the row is named."""

from __future__ import annotations

import threading
from collections.abc import Iterator

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise
from service.store import changes
from service.store.chain import START, Verdict, verify
from service.store.database import Database, Writing
from service.store.journal import note

RAW = (
    "INSERT INTO journal (at_ms, actor, action, line_item, reason, detail)"
    " VALUES (1, 'x', 'thaw', 'a', 'y', '{}')"
)
UNGUARDED = {
    "sqlite": ["DROP TRIGGER journal_keeps", "DROP TRIGGER journal_stays"],
    "postgresql": ["ALTER TABLE journal DISABLE TRIGGER USER"],
}


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def written(database: Database, count: int) -> list[str]:
    """Note so many orders; the head after each."""
    heads = []
    for n in range(count):
        database.write(lambda c, n=n: noted(c, n))  # type: ignore[misc]
        heads.append(found(database).head)
    return heads


def noted(connection: Writing, n: int) -> None:
    """One order, and its change number before it: the lock of the chain comes last."""
    changes.announce(connection, "freeze", ["a"])
    note(
        connection, wall_ms=n, actor="tester", action="freeze", line_item="a",
        reason=f"reason {n} é\u2028", detail={"n": n},
    )  # fmt: skip


def found(database: Database, remembered: str | None = None) -> Verdict:
    """What the audit says of the chain."""
    return database.read(lambda c: verify(c, remembered))


def by_hand(database: Database, *statements: str) -> None:
    """Do what only somebody with the database in hand can: lift the guards and edit."""
    lift = UNGUARDED["sqlite" if database.is_sqlite else "postgresql"]

    def work(connection: Writing) -> None:
        for statement in [*lift, *statements]:
            connection.execute(text(statement))

    database.write(work)


def test_an_untouched_chain_is_whole(database: Database) -> None:
    """Every row is sealed as it commits; each older head is still found in it."""
    assert found(database) == Verdict(0, 0, 0, START)
    heads = written(database, 5)
    whole = found(database)
    assert (whole.rows, whole.broken, whole.head) == (5, None, heads[-1])
    assert all(found(database, head).broken is None for head in [START, *heads])
    assert len(set(heads)) == 5


@pytest.mark.parametrize("statement", ["UPDATE journal SET reason = 'b'", "DELETE FROM journal"])
def test_the_database_itself_refuses_edits(database: Database, statement: str) -> None:
    """Rows are added, never changed, whatever the code above says."""
    written(database, 2)
    with pytest.raises(BrokenPromise):
        database.write(lambda c: c.execute(text(statement)))
    assert found(database).broken is None


@pytest.mark.parametrize(
    "column", ["at_ms", "actor", "action", "line_item", "reason", "detail", "adopted"]
)
def test_every_column_is_covered(database: Database, column: str) -> None:
    """A row altered in any column is the first broken one."""
    written(database, 4)
    value = "7" if column in ("at_ms", "adopted") else "'{\"n\": 7}'"
    by_hand(database, f"UPDATE journal SET {column} = {value} WHERE number = 3")  # noqa: S608
    verdict = found(database)
    assert (verdict.number, "altered" in str(verdict.broken)) == (3, True)


@pytest.mark.parametrize(
    ("statements", "number", "word"),
    [
        (["DELETE FROM journal WHERE number = 2"], 3, "removed"),
        (
            [
                "UPDATE journal SET link = 99 WHERE number = 2",
                "UPDATE journal SET link = 2 WHERE number = 3",
                "UPDATE journal SET link = 3 WHERE number = 2",
            ],
            3,
            "altered",
        ),
        (["DELETE FROM journal WHERE number = 4"], None, "end"),
        ([RAW], 5, "inserted"),
        ([RAW.replace("detail)", "detail, hash)").replace("'{}')", "'{}', '')")], 5, "inserted"),
    ],
)
def test_what_was_done_to_rows_is_named(
    database: Database, statements: list[str], number: int | None, word: str
) -> None:
    """Removed, put elsewhere, cut off the end, inserted."""
    written(database, 4)
    by_hand(database, *statements)
    verdict = found(database)
    assert (verdict.number, word in str(verdict.broken)) == (number, True)


def test_a_cut_end_shows_against_a_remembered_head(database: Database) -> None:
    """Whoever cuts the head too leaves a whole chain, but not one that holds the head kept."""
    heads = written(database, 4)
    by_hand(
        database,
        "DELETE FROM journal WHERE number = 4",
        f"UPDATE journal_head SET link = 3, hash = '{heads[2]}'",  # noqa: S608
    )
    assert found(database).broken is None
    assert found(database, heads[2]).broken is None
    assert "remembered" in str(found(database, heads[3]).broken)


def test_rows_of_the_release_before_are_adopted_while_its_workers_live(database: Database) -> None:
    """They are sealed before the next row and marked; once the workers are gone none is."""
    written(database, 1)
    old = "INSERT INTO worker (id, started_ms, beat_ms, change_seen) VALUES ('old', 1, 1, 1)"
    roll = "UPDATE journal_head SET elders = '[\"old\"]'"
    for statement in (old, roll, RAW):
        database.write(lambda c, s=statement: c.execute(text(s)))  # type: ignore[misc]
    assert (found(database).unsealed, found(database).broken) == (1, None)
    written(database, 1)
    assert (found(database).adopted, found(database).rows) == (1, 3)
    # Its last row and its leave: adopted once more, and then the door is shut.
    database.write(lambda c: c.execute(text(RAW)))
    database.write(lambda c: c.execute(text("DELETE FROM worker")))
    written(database, 1)
    assert (found(database).adopted, found(database).broken) == (2, None)
    database.write(lambda c: c.execute(text(RAW)))
    written(database, 1)
    assert (found(database).adopted, found(database).unsealed) == (2, 1)
    assert "no seal" in str(found(database).broken)


def test_orders_at_once_make_one_chain(database: Database) -> None:
    """Writers in any order of commits: one chain, no gap, nobody turned away."""
    threads = [threading.Thread(target=written, args=(database, 5)) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert (found(database).rows, found(database).broken) == (20, None)


def test_a_failed_order_leaves_no_link(database: Database) -> None:
    """What rolls back is sealed by nobody, and the next transaction does not pay for it."""
    written(database, 1)

    def work(connection: Writing) -> None:
        noted(connection, 7)
        raise BrokenPromise("a test")

    with pytest.raises(BrokenPromise):
        database.write(work)
    written(database, 1)
    assert (found(database).rows, found(database).broken) == (2, None)
