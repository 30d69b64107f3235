"""Databases that fail at a chosen statement or lose the answer to a COMMIT, for the loops."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from sqlalchemy import event, text
from sqlalchemy.exc import OperationalError

from service.store.database import Database

TABLES = (
    *("balance", "local_day", "slice", "stream", "learner", "checkpoint", "epoch"),
    *("change_log", "change_counter", "freezing", "journal", "quarantine"),
)


class Lost(Exception):
    """What a driver raises when the server does not answer; or, with a state, when it refuses."""

    def __init__(self, sqlstate: str | None = None) -> None:
        super().__init__("the connection was lost")
        self.sqlstate = sqlstate


class Faults:
    """
    Counts statements and fails from the n-th on.

    Args:
        from_then_on: Whether all later ones fail too.
        sqlstate: What PostgreSQL would say, such as 40001.
    """

    def __init__(self, number: int, *, from_then_on: bool, sqlstate: str | None = None) -> None:
        self.number, self.from_then_on, self.sqlstate = number, from_then_on, sqlstate
        self.seen = 0

    @property
    def struck(self) -> bool:
        """Whether a statement failed."""
        return self.seen >= self.number

    def __call__(self, _connection: Any, _cursor: Any, statement: str, *_rest: Any) -> None:
        """Called by the engine before each statement."""
        self.seen += 1
        if self.seen == self.number or (self.from_then_on and self.struck):
            raise OperationalError(statement, None, Lost(self.sqlstate))


@contextmanager
def failing(database: Database, faults: Faults) -> Iterator[Faults]:
    """Let the statements of a database fail as told."""
    event.listen(database.engine, "before_cursor_execute", faults)
    try:
        yield faults
    finally:
        event.remove(database.engine, "before_cursor_execute", faults)


@contextmanager
def losing_the_answer(database: Database, after: int = 0) -> Iterator[None]:
    """Let every COMMIT happen and, after the first few, its answer be lost."""
    dialect = database.engine.dialect
    commit, count = dialect.do_commit, itertools.count()

    def commit_and_fail(dbapi_connection: Any) -> None:
        commit(dbapi_connection)
        if next(count) >= after:
            raise OperationalError("COMMIT", None, Lost())

    dialect.do_commit = commit_and_fail  # type: ignore[method-assign]
    try:
        yield
    finally:
        dialect.do_commit = commit  # type: ignore[method-assign]


def everything(database: Database) -> list[list[tuple[Any, ...]]]:
    """Every row of every table that money, streams or learners touch."""

    def read(connection: Any) -> list[list[tuple[Any, ...]]]:
        found = [connection.execute(text(f"SELECT * FROM {table}")).all() for table in TABLES]  # noqa: S608
        return [sorted(tuple(row) for row in rows) for rows in found]

    return database.read(read)
