"""Line items keep their configuration and version apart from their money."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.errors import Conflict, NotFound, Stale
from service.ledger.days import local_day
from service.store import freezes, line_items
from service.store.audit import audit
from service.store.database import Database, Reading
from tests.builders import FLAT, UNIT, line_item

NOW = 1_796_000_000_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def create(database: Database, **changes: Any) -> None:
    """Create the flat line item, or another."""
    database.write(lambda connection: line_items.create(connection, line_item(**changes), NOW))


def change(database: Database, version: int, **changes: Any) -> None:
    """Change it as somebody who has seen this version."""
    database.write(lambda c: line_items.change(c, line_item(**changes), version, NOW + 1))


def money(connection: Reading) -> tuple[int, int]:
    """The bound and the target of the one balance."""
    row = connection.execute(text("SELECT budget, target FROM balance")).one()
    return row.budget, row.target


def test_what_was_created_is_read_again(database: Database) -> None:
    """Configuration, version and moments come back as they were put; its money begins at zero."""
    create(database)

    row = database.read(lambda connection: line_items.one(connection, "garden"))
    assert row == line_items.Row("garden", FLAT, 1, NOW, NOW, [])
    assert database.read(money) == (UNIT, UNIT)


def test_an_id_is_taken_once(database: Database) -> None:
    """The second line item of an id is refused and changes nothing of the first."""
    create(database)
    with pytest.raises(Conflict):
        create(database, budget=5)
    assert database.read(money) == (UNIT, UNIT)


def test_an_unknown_line_item_is_not_found(database: Database) -> None:
    """Asking for one that is not there is a refusal, loading it is an empty answer."""
    with pytest.raises(NotFound):
        database.read(lambda connection: line_items.one(connection, "nobody"))
    assert database.read(lambda connection: line_items.load(connection, ["nobody"])) == {}


def test_a_page_begins_after_an_id(database: Database) -> None:
    """Ids come in order, so a list can be read piece by piece while others are added."""
    for name in ("c", "a", "b"):
        create(database, id=name)

    pages = [
        database.read(lambda c, after=after: line_items.page(c, after, 2))  # type: ignore[misc]
        for after in (None, "b", "c")
    ]
    assert [[row.id for row in page] for page in pages] == [["a", "b"], ["c"], []]


def test_the_freezes_on_all_are_on_each(database: Database) -> None:
    """A line item shows the switch over all before its own freezes."""
    create(database)
    for name, source in (("garden", "person"), ("*", "all"), ("other", "person")):
        database.write(
            lambda c, n=name, s=source: freezes.put(c, n, s, wall_ms=1, actor="t", reason="r")  # type: ignore[misc]
        )

    row = database.read(lambda connection: line_items.one(connection, "garden"))
    assert [freeze["source"] for freeze in row.freezes] == ["all", "person"]


def test_a_change_takes_the_next_version(database: Database) -> None:
    """Version and moment move on, and the stream holds the edit."""
    create(database)
    change(database, 1, name="Another name", budget=2 * UNIT)

    row = database.read(lambda connection: line_items.one(connection, "garden"))
    assert (row.version, row.config["name"], row.updated_ms) == (2, "Another name", NOW + 1)
    assert database.read(money) == (2 * UNIT, 2 * UNIT)
    assert database.read(audit) == []


def test_a_stale_version_changes_nothing(database: Database) -> None:
    """Somebody else was quicker: refused, and their change stands."""
    create(database)
    change(database, 1, budget=2 * UNIT)
    with pytest.raises(Stale):
        change(database, 1, budget=3 * UNIT)
    assert database.read(money) == (2 * UNIT, 2 * UNIT)


def test_a_budget_below_what_is_spent_is_refused(database: Database) -> None:
    """The refusal names the figure, and version and budget stay."""
    create(database)
    spend = text("UPDATE balance SET spent = 700")
    database.write(lambda connection: connection.execute(spend))

    with pytest.raises(Conflict) as refused:
        change(database, 1, budget=699)
    assert refused.value.data == {"spent": "0.0000007"}
    assert database.read(lambda c: line_items.one(c, "garden")).version == 1


def test_a_lower_budget_is_a_target_while_money_is_held(database: Database) -> None:
    """The bound stays at what is out already, leases stop at the target."""
    create(database)
    hold = text("UPDATE balance SET held = 900")
    database.write(lambda connection: connection.execute(hold))
    change(database, 1, budget=500)
    assert database.read(money) == (900, 500)


def test_the_day_that_runs_takes_a_new_daily_budget(database: Database) -> None:
    """Today's row is raised or lowered with the edit, never below what it has out."""
    create(database, daily_budget=1000)
    today = text("INSERT INTO local_day VALUES ('garden', :day, 1000, 1000, 300, 200, 0)")
    row = {"day": local_day(NOW + 1, "Europe/Zurich")}
    database.write(lambda connection: connection.execute(today, row))
    bounds = text("SELECT budget, target FROM local_day")
    seen = []
    for version, daily in ((1, 2000), (2, 400), (3, None)):
        change(database, version, daily_budget=daily)
        seen.append(tuple(database.read(lambda c: c.execute(bounds).one())))
    assert seen[:2] == [(2000, 2000), (500, 400)]
    assert seen[2][1] > UNIT
