"""Connections and transactions, apart from every query: how we begin, retry and give up."""

from __future__ import annotations

import secrets
import sqlite3
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import NewType, TypeVar

from sqlalchemy import (
    BigInteger,
    Connection,
    LargeBinary,
    Text,
    TextClause,
    bindparam,
    create_engine,
    event,
    text,
)
from sqlalchemy.engine.interfaces import DBAPICursor
from sqlalchemy.exc import DBAPIError, OperationalError
from sqlalchemy.exc import TimeoutError as PoolTimeout

from service.errors import BrokenPromise, StoreAway, Unsafe

# The same object to Python, two types to mypy: a reader cannot call a writer.
Reading = NewType("Reading", Connection)
Writing = NewType("Writing", Connection)

T = TypeVar("T")
TRIES_MAX = 5
BUSY_S = 5
TURN_S = 0.0003
# Serialization failure and deadlock: nothing happened, and the same work may simply run again.
RETRY_STATES = {"40001", "40P01"}
_LAST = "bidkeel.last"


class Database:
    """
    One SQLite file or one PostgreSQL database.

    Args:
        url: A SQLAlchemy URL, sqlite:///… or postgresql+psycopg://….
        pool_size: Connections kept.
        statement_timeout_ms: The longest one statement may take.
        wall_ms: The wall clock in milliseconds; data for people, never an order.
    """

    def __init__(
        self,
        url: str,
        *,
        pool_size: int = 8,
        statement_timeout_ms: int = 5000,
        wall_ms: Callable[[], int] = lambda: time.time_ns() // 1_000_000,
    ) -> None:
        self.wall_ms = wall_ms
        self.is_sqlite = url.startswith("sqlite")
        self._writer = threading.Lock()
        if self.is_sqlite:
            self.engine = create_engine(url, pool_size=pool_size, connect_args={"timeout": BUSY_S})
            event.listen(self.engine, "connect", _prepare_sqlite)
            event.listen(self.engine, "begin", _begin_sqlite)
        else:
            options = f"-c statement_timeout={statement_timeout_ms} -c lock_timeout=2000"
            options += " -c idle_in_transaction_session_timeout=10000 -c synchronous_commit=on"
            # Without limits one forgotten session could hold the lock of a line item for ever.
            # A server that vanished sends no word: without these a thread would wait for hours.
            silent = {"tcp_user_timeout": 10_000, "keepalives_idle": 5, "keepalives_interval": 2}
            arguments = {"options": options, "connect_timeout": 3, **silent}
            # A queue of waiters on one hot row gets slower the longer it is: no overflow.
            self.engine = create_engine(
                url, pool_size=pool_size, max_overflow=0, pool_timeout=2, connect_args=arguments
            )

    def write(self, work: Callable[[Writing], T]) -> T:
        """
        Run `work` in one durable transaction; it is repeated whole after a deadlock.

        Raises:
            StoreAway: No answer; perhaps it happened, perhaps not.
        """
        for attempt in range(TRIES_MAX):
            try:
                with self._transaction() as connection:
                    # What a try that failed left there belongs to no later transaction.
                    connection.info.pop(_LAST, None)
                    done = work(Writing(connection))
                    for last in connection.info.pop(_LAST, ()):
                        last(Writing(connection))
                    return done
            # Half a transaction is never repeated: locks and reads of the failed try are void.
            except (DBAPIError, PoolTimeout) as error:
                _raise_unless_retried(error, attempt)
            # By chance, or the two that met would meet again.
            time.sleep((2 + secrets.randbelow(20)) * (attempt + 1) / 1000)
        raise StoreAway("the database kept refusing")

    def read(self, work: Callable[[Reading], T]) -> T:
        """
        Run `work` on one consistent view, changing nothing.

        Raises:
            StoreAway: No answer.
        """
        try:
            with self.engine.connect() as connection:
                connection = connection.execution_options(reading=True)
                # Two statements of one answer must not see two states of the money.
                if not self.is_sqlite:
                    connection = connection.execution_options(isolation_level="REPEATABLE READ")
                with connection.begin():
                    return work(Reading(connection))
        except (DBAPIError, PoolTimeout) as error:
            # A reader that idles too long is cut off under a class of error of its own.
            if isinstance(error, OperationalError | PoolTimeout) or error.connection_invalidated:
                raise StoreAway("the database did not answer") from error
            raise

    def check_safe(self) -> None:
        """
        Refuse a database that may forget what it has acknowledged.

        Raises:
            Unsafe: fsync or WAL is off.
        """
        if self.is_sqlite:
            mode, level = self.read(_sqlite_settings)
            if (mode, level) != ("wal", 2):
                raise Unsafe("SQLite must run with journal_mode=wal and synchronous=FULL.")
        elif self.read(lambda c: c.execute(text("SHOW fsync")).scalar_one()) != "on":
            raise Unsafe("PostgreSQL runs with fsync=off and may forget money; turn it on.")

    def close(self) -> None:
        """Close every pooled connection."""
        self.engine.dispose()

    @contextmanager
    def _transaction(self) -> Iterator[Connection]:
        if not self.is_sqlite:
            with self.engine.begin() as connection:
                yield connection
            return
        # SQLite lets one writer in at a time and is unfair about whom; our lock is fairer.
        with self._writer, self.engine.begin() as connection:
            yield connection


def at_the_end(connection: Writing, work: Callable[[Writing], None]) -> None:
    """Let `work` run once, last in this transaction, after every other lock is taken."""
    # A dict for its order: what was asked for first runs first, and nothing runs twice.
    connection.info.setdefault(_LAST, {})[work] = None


def among(
    statement: str | TextClause,
    name: str = "ids",
    of: type[Text] | type[LargeBinary] | type[BigInteger] = Text,
) -> TextClause:
    """A statement whose `IN :ids` (or the name given) takes a list, perhaps an empty one."""
    clause = text(statement) if isinstance(statement, str) else statement
    # Without a type PostgreSQL would compare an empty list as one of integers, and refuse.
    return clause.bindparams(bindparam(name, type_=of(), expanding=True))


def locking(connection: Connection, statement: str, *, skip: bool = False) -> TextClause:
    """
    A SELECT with the row lock of PostgreSQL; SQLite took its lock when it began.

    Args:
        skip: Pass rows by that somebody else has locked.
    """
    if connection.dialect.name != "sqlite":
        statement += " FOR NO KEY UPDATE" + (" SKIP LOCKED" if skip else "")
    return among(statement) if ":ids" in statement else text(statement)


def _prepare_sqlite(connection: object, _record: object) -> None:
    cursor = connection.cursor()  # type: ignore[attr-defined]
    # The driver would begin transactions by itself, deferred, and they then fail at once when
    # somebody else writes; we begin them ourselves.
    connection.isolation_level = None  # type: ignore[attr-defined]
    # All but the journal mode belong to a connection, so each one must be told anew.
    for pragma in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON"):
        cursor.execute(f"PRAGMA {pragma}")
    cursor.close()


def _begin_sqlite(connection: Connection) -> None:
    if connection.get_execution_options().get("reading"):
        connection.exec_driver_sql("BEGIN")
        return
    cursor = connection.connection.cursor()
    # SQLite waits for another process in steps of up to 100 ms, in which a third one slips past.
    cursor.execute("PRAGMA busy_timeout=0")
    until = time.monotonic() + BUSY_S
    while not (began := _began(cursor)) and time.monotonic() < until:
        time.sleep(TURN_S)
    cursor.execute(f"PRAGMA busy_timeout={BUSY_S * 1000}")
    cursor.close()
    if not began:
        # Once more, by the layer that says what is wrong.
        connection.exec_driver_sql("BEGIN IMMEDIATE")


def _began(cursor: DBAPICursor) -> bool:
    try:
        cursor.execute("BEGIN IMMEDIATE")
    except sqlite3.OperationalError:
        return False
    return True


def _sqlite_settings(connection: Reading) -> tuple[str, int]:
    mode = connection.execute(text("PRAGMA journal_mode")).scalar_one()
    return str(mode), int(connection.execute(text("PRAGMA synchronous")).scalar_one())


def _raise_unless_retried(error: Exception, attempt: int) -> None:
    state = getattr(getattr(error, "orig", None), "sqlstate", None)
    if state in RETRY_STATES and attempt + 1 < TRIES_MAX:
        return
    if isinstance(error, OperationalError | PoolTimeout) or state in RETRY_STATES:
        raise StoreAway("the database did not answer") from error
    # Broken during COMMIT nobody knows whether it happened; the caller's repeat will tell.
    if isinstance(error, DBAPIError) and error.connection_invalidated:
        raise StoreAway("the connection broke") from error
    raise BrokenPromise("the database refused a row") from error
