"""Refusals by minute, key, route and code: added up, paged from the newest, forgotten in pieces."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from service.store import keys, refusals
from service.store.database import Database
from service.store.refusals import Place

MINUTE_MS = 60_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def place(minute: int = 1, key_id: str = "k", route: str = "GET /a", code: str = "c") -> Place:
    """Where a refusal is counted."""
    return minute * MINUTE_MS, key_id, route, code


def count(database: Database, *places: Place, times: int = 1) -> None:
    """Count so many at each place."""
    database.write(lambda c: refusals.count(c, dict.fromkeys(places, times)))


def page(database: Database, before: int = 2**62, limit: int = 10) -> list[tuple[int, int]]:
    """Number and count of the newest rows."""
    found = database.read(lambda c: refusals.page(c, before, limit))
    return [(row["number"], row["count"]) for row in found]


def test_nothing_counted_writes_nothing(database: Database) -> None:
    """An empty flush costs no row."""
    count(database)
    assert page(database) == []


def test_what_several_workers_count_is_added_up(database: Database) -> None:
    """One row for one place, however many have counted there and how often."""
    count(database, place(), times=3)
    count(database, place(), place(code="d"), times=4)
    found = database.read(lambda c: refusals.page(c, 2**62, 10))
    assert sorted((row["code"], row["count"]) for row in found) == [("c", 7), ("d", 4)]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    "other", [place(2), place(key_id="x"), place(route="GET /b"), place(code="d")]
)
def test_each_part_of_a_place_tells_it_apart(database: Database, other: Place) -> None:
    """Another minute, key, route or code is another row."""
    count(database, place(), other)
    assert len(page(database)) == 2


def test_pages_stay_as_rows_are_added(database: Database) -> None:
    """Going back from a number, none is seen twice and none is left out."""
    for minute in range(5):
        count(database, place(minute))
    first = [number for number, _ in page(database, limit=2)]
    count(database, place(9))
    second = [number for number, _ in page(database, first[-1], 2)]
    third = [number for number, _ in page(database, second[-1], 2)]
    seen = [*first, *second, *third]
    assert len(seen) == 5
    assert seen == sorted(set(seen), reverse=True)
    assert page(database, min(seen)) == []


def test_a_known_key_is_named_and_an_unknown_one_is_not(database: Database) -> None:
    """So that people see whose calls are refused; nobody's key has no name."""
    key, _ = keys.add(database, "ad server", ["bid"])
    count(database, place(1, key.id), place(2, ""))
    found = database.read(lambda c: refusals.page(c, 2**62, 10))
    assert {row["key_id"]: row["key_name"] for row in found} == {key.id: "ad server", "": None}


def test_the_old_is_forgotten_in_pieces(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """By its minute, oldest first; what is as young as the moment stays."""
    monkeypatch.setattr(refusals, "PIECE_ROWS", 2)
    for minute in range(5):
        count(database, place(minute))
    pruned = [database.write(lambda c: refusals.prune(c, 3 * MINUTE_MS)) for _ in range(3)]
    assert pruned == [2, 1, 0]
    assert len(page(database)) == 2


def test_a_flood_pushes_out_the_oldest(database: Database, monkeypatch: pytest.MonkeyPatch) -> None:
    """However young: so many rows are kept and no more."""
    monkeypatch.setattr(refusals, "ROWS_MAX", 3)
    count(database, *(place(minute) for minute in range(8)))
    newest = [number for number, _ in page(database, limit=3)]
    assert database.write(lambda c: refusals.prune(c, 0)) == 5
    assert [number for number, _ in page(database)] == newest
    assert database.write(lambda c: refusals.prune(c, 0)) == 0
