"""The decision log keeps what it is given, and forgets what is old."""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.store import decisions
from service.store.database import Database

ALL = {
    "decision": text("SELECT * FROM decision ORDER BY number"),
    "quarantine": text("SELECT * FROM quarantine ORDER BY number"),
}
BID = {
    "at_ms": 1000,
    "line_item": "a",
    "ref": "nrOyaK5A49jxS2069y3bog",
    "request_id": "op-1",
    "source": "north",
    "floor": 400_000,
    "price": 1_234_567,
    "reason": None,
    "set_by": "value",
    "snapshot": 812,
    "test": 0,
    "auction": "second",
    "arm": "control",
    "held": 1_300_000,
    "floor_held": 450_000,
    "arm_odds": 0.1,
    "odds": 2.5e-7,
}
PASS = {**BID, "at_ms": 2000, "ref": None, "price": None, "reason": "frozen", "set_by": None}


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def rows(database: Database, table: str) -> list[dict[str, Any]]:
    """Every row of a table in the order of its numbers."""
    found = database.read(lambda connection: connection.execute(ALL[table]).all())
    return [dict(row._mapping) for row in found]


def test_bids_and_passes_are_kept_in_order(database: Database) -> None:
    """A batch lands as it was, numbered on."""
    decisions.log(database, [BID, PASS])
    decisions.log(database, [{**BID, "request_id": None}])

    assert rows(database, "decision") == [
        {"number": 1, **BID},
        {"number": 2, **PASS},
        {"number": 3, **BID, "request_id": None},
    ]


def test_a_decision_that_nobody_weighed_has_no_chances(database: Database) -> None:
    """A line of a release before this one, or a pass before any price: empty, not invented."""
    bare = {name: BID[name] for name in list(BID)[: list(BID).index("auction")]}
    decisions.log(database, [bare])
    (row,) = rows(database, "decision")
    assert (row["auction"], row["arm"]) == ("", "")
    assert [row[name] for name in ("held", "floor_held", "arm_odds", "odds")] == [None] * 4


def test_old_decisions_are_forgotten(database: Database) -> None:
    """What was decided before the moment goes, the rest stays."""
    decisions.log(database, [BID, PASS])

    assert database.write(lambda connection: decisions.prune(connection, 2000)) == 1
    assert [row["reason"] for row in rows(database, "decision")] == ["frozen"]


def test_a_set_aside_outcome_keeps_what_went_wrong(database: Database) -> None:
    """The quarantine names the line item, the error and the outcome."""
    body = {"event": "Outcome", "ref": "r"}
    database.write(lambda c: decisions.quarantine(c, "a", "KeyError: x", body, 5))

    (row,) = rows(database, "quarantine")
    assert (row["at_ms"], row["line_item"], row["error"]) == (5, "a", "KeyError: x")
    assert json.loads(row["body"]) == body
