"""Statements that go to the driver as they are, apart because every outcome waits for several.

The layer that compiles statements costs more than most of them; only its errors are needed here.
"""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from functools import lru_cache
from typing import Any

import orjson
from sqlalchemy import Connection

from service.store.database import Reading, Writing


class Insert:
    """
    How rows get into a table.

    Args:
        of: The type of each column, in the order in which rows name their values.
    """

    def __init__(self, table: str, **of: str) -> None:
        names, marks = ", ".join(of), ", ".join("?" * len(of))
        reads = ", ".join(_READ[kind].format(place) for place, kind in enumerate(of.values()))
        into = f"INSERT INTO {table} ({names})"
        self._each = f"{into} VALUES ({marks})"
        # Names and types of ours; whatever came stands in the one value.
        self._all = f"{into} SELECT {reads} FROM jsonb_array_elements(%s::jsonb) AS given"  # noqa: S608

    def run(self, connection: Writing, rows: Sequence[tuple[Any, ...]]) -> None:
        """Insert these rows in their order."""
        if not rows:
            return
        if _is_sqlite(connection):
            connection.exec_driver_sql(self._each, list(rows))
            return
        # One text for all of them: a message for each row costs both sides several times as much.
        told = orjson.dumps(rows, default=bytes.hex, option=orjson.OPT_SERIALIZE_NUMPY)
        connection.exec_driver_sql(self._all, (told.decode(),))


def update_many(connection: Writing, statement: str, rows: Sequence[Mapping[str, Any]]) -> int:
    """Run a statement with names once for each row; returns how many rows it has changed."""
    marked = statement if _is_sqlite(connection) else _renamed(statement)
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
    among = statement.replace("IN (?)", "= ANY(%b)")
    return connection.exec_driver_sql(
        among + (" FOR NO KEY UPDATE" if lock else ""), (list(wanted),)
    )


def _is_sqlite(connection: Connection) -> bool:
    return connection.dialect.name == "sqlite"


@lru_cache(maxsize=64)
def _renamed(statement: str) -> str:
    return re.sub(r":(\w+)", r"%(\1)s", statement)


# From a text in JSON, in which bytes stand as hex.
_READ = {
    "TEXT": "given ->> {}",
    "BIGINT": "(given ->> {})::bigint",
    "FLOAT": "(given ->> {})::double precision",
    "BYTES": "decode(given ->> {}, 'hex')",
}
