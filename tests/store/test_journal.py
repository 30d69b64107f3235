"""The journal keeps who did what, when and why, newest first."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest

from service.store.database import Database
from service.store.journal import newest, note


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def act(database: Database, line_item: str, action: str, **detail: Any) -> None:
    """Note one action of a tester at moment 7."""
    database.write(
        lambda connection: note(
            connection,
            wall_ms=7,
            actor="tester",
            action=action,
            line_item=line_item,
            reason="because",
            detail=detail,
        )
    )


def test_a_row_tells_the_whole_story(database: Database) -> None:
    """Actor, action, reason and what was before and after come back as they were put."""
    act(database, "a", "freeze", before=[], after=[{"source": "person"}])

    (row,) = database.read(lambda connection: newest(connection, "a", 10))
    assert row == {
        "number": 1,
        "at_ms": 7,
        "actor": "tester",
        "action": "freeze",
        "line_item": "a",
        "reason": "because",
        "detail": {"before": [], "after": [{"source": "person"}]},
    }


def test_the_newest_come_first_and_only_of_the_line_item(database: Database) -> None:
    """A limit cuts the oldest off; other line items stay out."""
    for action in ("create", "freeze", "thaw"):
        act(database, "a", action)
    act(database, "b", "create")

    rows = database.read(lambda connection: newest(connection, "a", 2))
    assert [row["action"] for row in rows] == ["thaw", "freeze"]
