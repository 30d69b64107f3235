"""Sums for metrics where there is nothing, and what each of them counts and leaves out."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.store import changes, decisions, findings, workers
from service.store.database import Database
from service.store.gauges import SOURCES, STATES, measure
from tests.builders import NAME, begin

WALL_MS = 1_700_000_000_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def told(database: Database) -> dict[str, Any]:
    """Everything at one moment."""
    return database.read(lambda c: measure(c, WALL_MS))


def test_an_empty_database_is_all_nought(database: Database) -> None:
    """Every member is there from the start, so that no graph begins with a gap."""
    found = told(database)
    assert (found["money"], found["tripwires_firing"]) == ({}, {})
    assert found["freezes"] == dict.fromkeys(SOURCES, 0)
    assert found["slices"] == dict.fromkeys(STATES, 0)
    noughts = [
        *("line_items", "learner_lag_entries", "learner_lag_seconds", "halted_learners"),
        *("change_lag_changes", "live_workers", "quarantined_outcomes"),
    ]
    assert [found[name] for name in noughts] == [0] * len(noughts)
    assert len(bytes.fromhex(found["incarnation"])) > 0


def test_the_slowest_live_worker_sets_the_lag(database: Database) -> None:
    """One that has gone silent counts no more; without any nobody is behind."""
    database.write(lambda c: changes.announce(c, "freeze", ["*"] * 7))
    for worker, seen in (("quick", 7), ("slow", 4)):
        database.write(lambda c, w=worker, s=seen: workers.beat(c, w, s, 1))  # type: ignore[misc]
    found = told(database)
    assert (found["live_workers"], found["change_lag_changes"]) == (2, 3)
    database.write(lambda c: workers.leave(c, "slow"))
    assert told(database)["change_lag_changes"] == 0
    silent = text("UPDATE service_clock SET now_ms = now_ms + :gone")
    database.write(lambda c: c.execute(silent, {"gone": workers.LIVE_MS}))
    found = told(database)
    assert (found["live_workers"], found["change_lag_changes"]) == (0, 0)


@pytest.mark.parametrize(
    "statement", ["SET halted = 1", "SET tries = 2", "SET halted = 1, tries = 2"]
)
@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_a_learner_that_is_halted_or_stuck_counts_once(database: Database, statement: str) -> None:
    """Either way its line item passes; the other one goes on."""
    for name in (NAME, "meadow"):
        begin(database, id=name)
    stop = text(f"UPDATE learner {statement} WHERE line_item = 'meadow'")
    database.write(lambda c: c.execute(stop))
    assert told(database)["halted_learners"] == 1


def test_findings_are_counted_by_rule_while_they_are_open(database: Database) -> None:
    """On how many line items; one that has cleared is over."""
    said: dict[str, Any] = {"action": "warn", "saw": "", "numbers": {}, "since_ms": 1}
    for name in (NAME, "meadow"):
        begin(database, id=name)
        for rule in ("voids", "win_rate"):
            database.write(
                lambda c, n=name, r=rule: findings.put(c, n, r, wall_ms=1, **said)  # type: ignore[misc]
            )
    assert told(database)["tripwires_firing"] == {"voids": 2, "win_rate": 2}
    number = database.read(lambda c: findings.still_open(c, NAME))["voids"].number
    assert database.write(lambda c: findings.clear(c, number, 2))
    assert not database.write(lambda c: findings.clear(c, number, 3))
    assert told(database)["tripwires_firing"] == {"voids": 1, "win_rate": 2}


def test_only_what_waits_in_quarantine_is_counted(database: Database) -> None:
    """What somebody has retried or released is dealt with."""
    begin(database)
    for _ in range(3):
        database.write(lambda c: decisions.quarantine(c, NAME, "KeyError", {}, 5))
    done = text("UPDATE quarantine SET state = :state WHERE number = :number")
    rows = [{"state": "retried", "number": 1}, {"state": "released", "number": 3}]
    database.write(lambda c: c.execute(done, rows))
    assert told(database)["quarantined_outcomes"] == 1
