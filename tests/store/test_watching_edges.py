"""The watch page's reads where there is little, or only one line item is wanted."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.store import decisions, freezes, watching, watching_series
from service.store.database import Database
from service.store.watching import Latest, Overview
from tests.builders import NAME, append, begin, line_item, valued, won
from tests.store.test_watching import HOUR_MS, NOW_MS, decided

DAY_MS = 86_400_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=lambda: NOW_MS)
    clock = text("UPDATE service_clock SET now_ms = 5000, seen_ms = :now")
    database.write(lambda c: c.execute(clock, {"now": NOW_MS}))
    yield database
    database.close()


def overview(database: Database, only: str | None = None) -> Overview:
    """What stands, of all or of one."""
    return database.read(lambda c: watching.overview(c, watching.configs(c, None), only))


def latest(database: Database, *names: str) -> dict[str, Latest]:
    """What these have done of late."""
    return database.read(lambda c: watching.latest(c, list(names), NOW_MS))


def test_an_empty_database_has_nothing_to_watch(database: Database) -> None:
    """And says so without a line item, a journal or a version."""
    assert overview(database) == Overview(NOW_MS, [], [])
    assert database.read(watching.versions) == {}
    assert latest(database) == {}
    assert latest(database, "nobody") == {"nobody": Latest()}
    assert database.read(lambda c: watching.journal(c, None, 5)) == []
    assert database.read(lambda c: watching.entries(c, "nobody", 5)) == []


def test_one_line_item_is_read_alone_and_alike(database: Database) -> None:
    """What all have beside it makes no difference to it."""
    for name in ("a", NAME, "z"):
        begin(database, id=name)
        put: dict[str, Any] = {"wall_ms": 5, "actor": "t", "reason": "r"}
        database.write(lambda c, n=name, p=put: freezes.put(c, n, "person", **p))  # type: ignore[misc]
    everything = overview(database)
    assert [one.id for one in everything.standings] == ["a", NAME, "z"]
    assert overview(database, NAME).standings == [everything.standings[1]]
    assert overview(database, "nobody").standings == []


def test_what_a_reader_does_not_know_yet_is_left_for_its_next_look(database: Database) -> None:
    """A line item that was made since its configurations were read is not half shown."""
    begin(database)
    known = database.read(lambda c: watching.configs(c, None))
    begin(database, id="meadow")
    found = database.read(lambda c: watching.overview(c, known))
    assert [one.id for one in found.standings] == [NAME]
    assert set(database.read(watching.versions)) == {NAME, "meadow"}


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("ids", "found"), [(None, {"a", "b"}), ([], set()), (["b", "nobody"], {"b"})]
)
def test_configurations_are_those_asked_for(
    database: Database, ids: list[str] | None, found: set[str]
) -> None:
    """All, none, or those of a list that exist."""
    for name in ("a", "b"):
        begin(database, id=name)
    configs = database.read(lambda c: watching.configs(c, ids))
    assert set(configs) == found
    assert all(config == line_item(id=name) for name, (config, _) in configs.items())


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("zone", "day"),
    [("Europe/Zurich", "2025-12-01"), ("Pacific/Kiritimati", "2025-12-02"), ("UTC", "2025-12-01")],
)
def test_a_day_is_the_one_it_is_where_the_line_item_lives(
    database: Database, zone: str, day: str
) -> None:
    """At 14:40 UTC it is tomorrow already on the first of islands."""
    begin(database, flight={"time_zone": zone})
    row = text(
        "INSERT INTO local_day (line_item, day, budget, target, spent, held, over_spent)"
        " VALUES (:name, :day, 9, 9, :spent, 0, 0)"
    )
    days = [(1, "2025-12-01"), (2, "2025-12-02"), (3, "2025-11-30")]
    rows = [{"name": NAME, "day": one, "spent": spent} for spent, one in days]
    database.write(lambda c: c.execute(row, rows))
    (one,) = overview(database).standings
    assert one.day is not None
    assert one.day["spent"] == {on: spent for spent, on in days}[day]


def test_what_waits_in_quarantine_is_counted(database: Database) -> None:
    """By line item, and no more once somebody has dealt with it."""
    for name in (NAME, "meadow"):
        begin(database, id=name)
    for _ in range(3):
        database.write(lambda c: decisions.quarantine(c, NAME, "KeyError", {}, 5))
    assert [one.waiting for one in overview(database).standings] == [3, 0]
    first = "WHERE number = (SELECT min(number) FROM quarantine)"
    done = text(f"UPDATE quarantine SET state = 'retried' {first}")  # noqa: S608
    database.write(lambda c: c.execute(done))
    assert [one.waiting for one in overview(database).standings] == [2, 0]
    assert [one.waiting for one in overview(database, NAME).standings] == [2]


def test_a_line_item_that_only_passes_has_no_price(database: Database) -> None:
    """Nor has a test bid any; ties among reasons are broken alike on both databases."""
    begin(database)
    passes = [
        decided(NAME, 10 + n, price=None, reason=reason, set_by=None)
        for n, reason in enumerate(("frozen", "under_floor"))
    ]
    decisions.log(database, [*passes, decided(NAME, 5, test=1)])
    found = latest(database, NAME)[NAME]
    assert (found.price, found.price_ms, found.bids, found.set_by) == (None, None, 0, None)
    assert (found.passes, found.top_pass) == (2, "under_floor")


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(("ago_ms", "price"), [(HOUR_MS - 1, None), (HOUR_MS, 7), (HOUR_MS + 5, 7)])
def test_the_price_of_an_hour_ago_is_at_least_so_old(
    database: Database, ago_ms: int, price: int | None
) -> None:
    """The hour itself is old enough."""
    begin(database)
    decisions.log(database, [decided(NAME, ago_ms, price=7)])
    found = latest(database, NAME)[NAME]
    assert (found.price, found.price_hour_ago) == (7, price)


def test_line_items_do_not_tell_of_each_other(database: Database) -> None:
    """Feeds and decisions of two at once stay with their own."""
    for name in ("a", "b"):
        begin(database, id=name)
    append(database, won(1), valued(1, 5), name="a")
    decisions.log(database, [decided("b", 5, price=9, set_by="cap")])
    found = latest(database, "a", "b")
    assert (set(found["a"].feed), found["a"].bids) == ({"won", "value"}, 0)
    assert (found["b"].feed, found["b"].bids, found["b"].bids_at_cap) == ({}, 1, 1)
    assert found["b"].feed_since_ms is not None


@pytest.mark.parametrize("damaged", ["{", "[1]", "7"])
@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_a_damaged_entry_blinds_nobody(database: Database, damaged: str) -> None:
    """The page is wanted most when something is wrong; the audit names the entry."""
    begin(database)
    append(database, won(1, 600), won(2, 700))
    spoil = text("UPDATE stream SET body = :body WHERE seq = 2")
    database.write(lambda c: c.execute(spoil, {"body": damaged}))
    rows = database.read(lambda c: watching.entries(c, NAME, 5))
    assert [bool(row["body"]) for row in rows] == [True, False, True]
    found = database.read(lambda c: watching_series.series(c, NAME, 0, NOW_MS, "2025-12-01"))
    assert [price for _, price in found.clearing] == [700]
