"""Statements that go to the driver as they are, apart because every outcome waits for several.

The layer that compiles statements costs more than most of them; only its errors are needed here.
Values stand as `?` for one that is a list or a tuple, as `:name` for one that is a dict.
"""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from functools import lru_cache
from typing import Any

from sqlalchemy import Connection

from service.store.database import Reading, Writing


def insert_many(connection: Writing, statement: str, rows: Sequence[tuple[Any, ...]]) -> None:
    """Run a statement with a `?` for each value once for each row."""
    if rows:
        connection.exec_driver_sql(_marked(statement, _is_sqlite(connection)), list(rows))


def update_many(connection: Writing, statement: str, rows: Sequence[Mapping[str, Any]]) -> int:
    """Run a statement with names once for each row; returns how many rows it has changed."""
    marked = _marked(statement, _is_sqlite(connection))
    # One alone is spared what many cost to be sent together.
    given: Any = rows[0] if len(rows) == 1 else list(rows)
    return connection.exec_driver_sql(marked, given).rowcount


def select_among(
    connection: Reading | Writing, statement: str, wanted: Collection[Any], *, lock: bool = False
) -> Iterable[Any]:
    """
    The rows of a SELECT with one `IN (?)`, for all that are wanted at once.

    Args:
        lock: Take the row locks of PostgreSQL; SQLite took its lock when it began.
    """
    if not wanted:
        return ()
    if _is_sqlite(connection):
        marks = ",".join("?" * len(wanted))
        return connection.exec_driver_sql(statement.replace("(?)", f"({marks})"), tuple(wanted))
    # One text for any number of them, which PostgreSQL then plans once and not each time.
    marked = _marked(statement.replace("IN (?)", "= ANY(?)"), False)
    return connection.exec_driver_sql(
        marked + (" FOR NO KEY UPDATE" if lock else ""), (list(wanted),)
    )


def _is_sqlite(connection: Connection) -> bool:
    return connection.dialect.name == "sqlite"


@lru_cache(maxsize=256)
def _marked(statement: str, is_sqlite: bool) -> str:
    """The statement with the marks of the driver for its values."""
    if is_sqlite:
        return statement
    return _NAMED.sub(r"%(\1)s", statement).replace("?", "%s")


_NAMED = re.compile(r":(\w+)")
