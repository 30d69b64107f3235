"""Databases that are full, slow, locked or out of connections: 503 for a while, never a loss."""

from __future__ import annotations

import re
import time
from collections.abc import Iterator
from contextlib import closing, contextmanager
from typing import Any

import pytest
from sqlalchemy import event, text

from service.commands.postgresql_process import PostgreSQLProcess
from service.errors import StoreAway, Unsafe
from service.feedback import Report
from service.store import outcomes
from service.store.audit import audit
from service.store.database import Database
from service.store.migrate import is_empty, migrate, require_current, upgrade
from tests.builders import PRICE, working
from tests.money.faulty import Faults
from tests.money.scene import Scene

CHEAP = re.compile(r"CONSTANT|\(")  # Rows given in the statement, or found by it already.
only_sqlite = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
only_postgresql = pytest.mark.parametrize("backend", ["postgresql"], indirect=True)


@contextmanager
def full(database: Database) -> Iterator[None]:
    """Let the file of a SQLite database grow no further, as on a disk without room."""

    def stop_growing(connection: Any) -> None:
        pages = connection.exec_driver_sql("PRAGMA page_count").scalar_one()
        connection.exec_driver_sql(f"PRAGMA max_page_count={pages}")

    event.listen(database.engine, "begin", stop_growing)
    try:
        yield
    finally:
        event.remove(database.engine, "begin", stop_growing)
        event.listen(database.engine, "begin", grow_again)


def grow_again(connection: Any) -> None:
    """Room again."""
    connection.exec_driver_sql("PRAGMA max_page_count=1073741823")


@pytest.mark.anyio
@only_sqlite
async def test_a_full_disk_stops_receipts_but_no_prices(migrated_url: str) -> None:
    """Outcomes are not acknowledged, bids leave from the slice in hand, room mends everything."""
    async with working(migrated_url) as worker:
        await worker.create(bid_cap=PRICE, value={"arrival": "accrues"})
        won = (await worker.bids(1))[0]
        await worker.report(Report("won", won.ticket, clearing=PRICE))
        told = [Report("value", won.ticket, value=1, event_id=f"e{n}") for n in range(800)]
        # The rest of the last page takes a few rows; then nothing more is written.
        with full(worker.database), pytest.raises(StoreAway):
            await worker.report(*told)
        with full(worker.database):
            assert (await worker.bid()).bid == PRICE
        receipts = await worker.report(*told)
        assert {receipt.status for receipt in receipts} <= {"recorded", "duplicate"}
        assert worker.one("SELECT count(*) FROM stream WHERE kind = 'value'") == 800
        assert worker.audit() == []


@only_postgresql
def test_a_slow_statement_is_given_up(migrated_url: str) -> None:
    """Who waits is told within the limit, and the connection works on."""
    with closing(Database(migrated_url, statement_timeout_ms=100)) as database:
        began = time.monotonic()
        with pytest.raises(StoreAway):
            database.write(lambda c: c.execute(text("SELECT pg_sleep(30)")))
        assert time.monotonic() - began < 3
        assert database.read(lambda c: c.execute(text("SELECT 1")).scalar_one()) == 1


@only_postgresql
def test_a_lock_that_somebody_sleeps_on_is_waited_for_briefly(migrated_url: str) -> None:
    """The sleeper is ended by the server, and a waiter gives up long before it."""
    with closing(Database(migrated_url)) as database, closing(Database(migrated_url)) as other:
        scene = Scene(database)
        scene.lease()
        bid = scene.placed(8)
        with other.engine.begin() as sleeper:
            sleeper.execute(text("SELECT 1 FROM balance FOR UPDATE"))
            with pytest.raises(StoreAway):
                outcomes.book(database, [scene.told(bid, "won", 7)])
        assert scene.tell(bid, "won", 7) == "recorded"
        limits = "SELECT setting FROM pg_settings WHERE name = :name"
        assert scene.one(limits, name="lock_timeout") == "2000"
        assert scene.one(limits, name="idle_in_transaction_session_timeout") == "10000"
        assert scene.one(limits, name="synchronous_commit") == "on"


@only_postgresql
def test_without_a_connection_a_call_gives_up(migrated_url: str) -> None:
    """All of the pool is in use: no endless queue, and no harm once one is back."""
    with closing(Database(migrated_url, pool_size=1)) as database:
        with database.engine.connect():
            with pytest.raises(StoreAway):
                database.read(lambda c: c.execute(text("SELECT 1")))
        assert database.read(lambda c: c.execute(text("SELECT 1")).scalar_one()) == 1


@pytest.mark.anyio
async def test_bids_need_no_connection_while_money_is_in_hand(migrated_url: str) -> None:
    """Every connection of the worker is taken, and prices leave all the same."""
    async with working(migrated_url) as worker:
        await worker.create(bid_cap=PRICE)
        await worker.bids(1)
        with failing_connections(worker.database):
            answers = await worker.bids(6)
        assert [answer.bid for answer in answers] == [PRICE] * 6


@contextmanager
def failing_connections(database: Database) -> Iterator[None]:
    """No statement gets through."""
    faults = Faults(1, from_then_on=True)
    event.listen(database.engine, "before_cursor_execute", faults)
    try:
        yield
    finally:
        event.remove(database.engine, "before_cursor_execute", faults)


@only_sqlite
def test_nothing_that_money_waits_for_reads_a_whole_table(migrated_url: str) -> None:
    """With a hundred million rows an insert costs what it costs with none: all is by index."""
    with closing(Database(migrated_url)) as database:
        seen: list[tuple[str, Any]] = []
        scene = Scene(database)

        def note(_c: Any, _cursor: Any, statement: str, values: Any, *_rest: Any) -> None:
            seen.append((statement, values))

        event.listen(database.engine, "before_cursor_execute", note)
        scene.lease()
        bids = [scene.placed(8) for _ in range(2)]
        scene.tell(bids[0], "won", 7)
        scene.value(bids[0], "v", 3)
        scene.retire()
        event.remove(database.engine, "before_cursor_execute", note)
        scanned = {step for one in seen for step in scans(database, *one)}
        assert scans(database, "SELECT * FROM stream WHERE kind = 'won'", ())
    # Few rows for ever: one clock, and the workers of one database.
    few = ("service_clock", "worker", "c ")
    assert [step for step in scanned if not step.removeprefix("SCAN ").startswith(few)] == []


def scans(database: Database, statement: str, values: Any) -> list[str]:
    """The steps of a statement that read a table from end to end."""
    if statement.split()[0] not in ("SELECT", "UPDATE", "INSERT", "DELETE", "WITH"):
        return []
    with database.engine.connect() as connection:
        one = values[0] if isinstance(values, list) else values
        rows = connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {statement}", one).all()
    return [row[3] for row in rows if row[3].startswith("SCAN") and not CHEAP.search(row[3])]


def test_a_migration_that_fails_half_way_leaves_nothing(database_url: str) -> None:
    """At whichever statement: the database is as empty as before, and the next try succeeds."""
    for number in (2, 10, 25):
        with closing(Database(database_url)) as database:
            faults = Faults(number, from_then_on=True)
            event.listen(database.engine, "before_cursor_execute", faults)
            with pytest.raises(Exception, match="connection was lost"):
                with database.engine.begin() as connection:
                    upgrade(connection)
            event.remove(database.engine, "before_cursor_execute", faults)
            assert faults.struck
            assert is_empty(database)
            with pytest.raises(Unsafe):
                require_current(database)
    migrate(database_url)
    with closing(Database(database_url)) as database:
        require_current(database)


def test_a_postgresql_that_may_forget_is_refused() -> None:
    """With fsync off a commit is no promise, so nothing starts on it."""
    with PostgreSQLProcess() as server, closing(Database(server.url)) as database:
        database.check_safe()
        with database.engine.connect() as connection:
            own = connection.execution_options(isolation_level="AUTOCOMMIT")
            own.execute(text("ALTER SYSTEM SET fsync = off"))
        server.stop()
        server.start()
        with closing(Database(server.url)) as again, pytest.raises(Unsafe):
            again.check_safe()


@only_postgresql
def test_an_audit_may_take_its_time(migrated_url: str) -> None:
    """No limit cuts a long replay off; the transactions after it have theirs again."""
    limits = text(
        "SELECT name, setting FROM pg_settings WHERE name IN"
        " ('statement_timeout', 'idle_in_transaction_session_timeout') ORDER BY name"
    )
    with closing(Database(migrated_url, pool_size=1)) as database:
        found, during = database.read(lambda c: (audit(c), c.execute(limits).all()))
        after = database.read(lambda c: c.execute(limits).all())
    assert found == []
    assert [row.setting for row in during] == ["0", "0"]
    assert [row.setting for row in after] == ["10000", "5000"]


@only_postgresql
def test_a_reader_that_is_cut_off_is_told_that_the_database_is_away(migrated_url: str) -> None:
    """Whatever class of error the driver has for it."""

    def idle(connection: Any) -> None:
        connection.execute(text("SET LOCAL idle_in_transaction_session_timeout = 50"))
        time.sleep(0.5)
        connection.execute(text("SELECT 1"))

    with closing(Database(migrated_url)) as database:
        with pytest.raises(StoreAway):
            database.read(idle)
