"""Rows go in as they are on both databases, however they are sent, and a bad one stops them all."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import closing
from typing import Any

import numpy as np
import pytest
from sqlalchemy import text

from service.errors import BrokenPromise
from service.store.database import Database
from service.store.driver import Insert, select_among, update_many

THINGS = Insert("thing", name="TEXT", count="BIGINT", share="FLOAT", raw="BYTES")
ROWS: list[tuple[Any, ...]] = [
    ("pear", 1, 0.1, b"\x00\xff"),
    ("", -(2**63), 5e-324, b""),
    ("quince \u00e4\U0001f333 %s :name ? ' \" \\ \\u0041 \x01\n", 2**63 - 1, 1e308, b"\\x41"),
    (json.dumps({"why": 'a "b"', "n": None}), 0, 0.1 + 0.2, bytes(range(256))),
    ("plum", None, None, None),
]  # fmt: skip


@pytest.fixture(name="database")
def _database(database_url: str) -> Iterator[Database]:
    kinds = ("INTEGER", "REAL", "BLOB")
    if not database_url.startswith("sqlite"):
        kinds = ("BIGINT", "DOUBLE PRECISION", "BYTEA")
    columns = "name TEXT NOT NULL UNIQUE, count {}, share {}, raw {}".format(*kinds)
    with closing(Database(database_url, pool_size=2)) as database:
        database.write(lambda c: c.execute(text(f"CREATE TABLE thing ({columns})")))
        yield database


def things(database: Database) -> list[tuple[Any, ...]]:
    """All rows by name, with bytes as bytes."""
    statement = text("SELECT name, count, share, raw FROM thing")
    found = database.read(lambda c: c.execute(statement).all())
    return sorted((*row[:3], None if row[3] is None else bytes(row[3])) for row in found)


def test_rows_come_back_as_they_went_in(database: Database) -> None:
    """Every letter, the longest whole numbers, floats to their last bit, and what is not there."""
    database.write(lambda c: THINGS.run(c, ROWS))
    assert things(database) == sorted(ROWS)


def test_numbers_of_arrays_are_numbers(database: Database) -> None:
    """What comes out of an array's computation is kept as any other float."""
    database.write(lambda c: THINGS.run(c, [("fig", 1, np.float64(0.1), None)]))
    assert things(database) == [("fig", 1, 0.1, None)]


def test_no_rows_are_nothing(database: Database) -> None:
    """Nobody has to ask first whether there are any."""
    database.write(lambda c: THINGS.run(c, []))
    assert things(database) == []


def test_a_bad_row_stops_all_of_them(database: Database) -> None:
    """The error is that of a refused row and not of a lost connection; nothing is left."""
    with pytest.raises(BrokenPromise):
        database.write(lambda c: THINGS.run(c, [*ROWS, ROWS[0]]))
    assert things(database) == []


@pytest.mark.parametrize("count", [1, 3])
def test_updates_tell_how_many_rows_they_changed(database: Database, count: int) -> None:
    """A guard that refuses one of them shows in the count, whether one or several are sent."""
    database.write(lambda c: THINGS.run(c, ROWS))
    statement = "UPDATE thing SET count = :count, share = :count WHERE name = :name AND :count > 0"
    rows = [{"name": row[0], "count": n} for n, row in enumerate(ROWS[:count], start=1)]
    assert database.write(lambda c: update_many(c, statement, rows)) == count
    rows[-1]["count"] = 0
    assert database.write(lambda c: update_many(c, statement, rows)) == count - 1
    changed = {row[0]: row[1] for row in things(database)}
    assert [changed[str(row["name"])] for row in rows] == list(range(1, count + 1))


def test_rows_are_found_by_any_of_many_values(database: Database) -> None:
    """Texts or bytes, with a lock or without; nothing wanted finds nothing."""
    database.write(lambda c: THINGS.run(c, ROWS))

    def find(column: str, wanted: list[Any], *, lock: bool = False) -> set[str]:
        statement = f"SELECT name FROM thing WHERE {column} IN (?)"  # noqa: S608 - ours, above.
        return {
            row[0]
            for row in database.write(lambda c: list(select_among(c, statement, wanted, lock=lock)))
        }

    for lock in (False, True):
        names = [row[0] for row in ROWS]
        assert find("name", names, lock=lock) == set(names)
        assert find("raw", [b"\\x41", b"", b"none"], lock=lock) == {ROWS[1][0], ROWS[2][0]}
        assert find("name", [], lock=lock) == set()
