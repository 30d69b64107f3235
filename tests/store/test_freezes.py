"""Freezes are rows, one per source, and each is lifted by itself."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest

from service.store import freezes
from service.store.database import Database


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def put(database: Database, line_item: str, source: str, reason: str = "why") -> bool:
    """Freeze as a tester at moment 1."""
    return database.write(
        lambda c: freezes.put(c, line_item, source, wall_ms=1, actor="tester", reason=reason)
    )


def on(database: Database, *line_items: str) -> dict[str, list[dict[str, Any]]]:
    """The freezes on these names."""
    return database.read(lambda connection: freezes.on(connection, list(line_items)))


def test_a_freeze_tells_who_and_why(database: Database) -> None:
    """The row names source, moment, actor and reason, and concerns its line item alone."""
    put(database, "a", "person", "prices look wrong")

    assert on(database, "a", "b") == {
        "a": [{"source": "person", "at_ms": 1, "actor": "tester", "reason": "prices look wrong"}],
        "b": [],
    }


def test_the_first_freeze_of_a_source_stands(database: Database) -> None:
    """A second freeze by the same source keeps the first reason and says that nothing changed."""
    assert put(database, "a", "person", "first")
    assert not put(database, "a", "person", "second")
    assert [freeze["reason"] for freeze in on(database, "a")["a"]] == ["first"]


def test_sources_freeze_and_thaw_apart(database: Database) -> None:
    """Lifting one source leaves the others."""
    for source in ("person", "tripwire", "audit"):
        put(database, "a", source)

    assert database.write(lambda c: freezes.lift(c, "a", ["person", "audit"], wall_ms=2)) == 2
    assert [freeze["source"] for freeze in on(database, "a")["a"]] == ["tripwire"]


def test_the_switch_over_all_has_a_name_no_line_item_can_have(database: Database) -> None:
    """It is a row of its own, and thawing a line item does not touch it."""
    put(database, "*", "all")
    database.write(lambda connection: freezes.lift(connection, "a", ["person", "all"], wall_ms=2))

    assert [freeze["source"] for freeze in on(database, "*")["*"]] == ["all"]
