"""The rows of rehearsals: what may follow what, and who may see what."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest

from service.errors import NotFound
from service.store import rehearsals, workers
from service.store.database import Database

WORKER = "here"


@pytest.fixture
def database(migrated_url: str) -> Iterator[Database]:
    """A database with one live worker."""
    one = Database(migrated_url)
    one.write(lambda c: workers.beat(c, WORKER, 0, 1))
    yield one
    one.close()


def begin(database: Database, name: str = "one", worker: str = WORKER, line_item: str = "") -> int:
    """Put a rehearsal of a hundred auctions in the queue."""
    return database.write(
        lambda c: rehearsals.create(
            c,
            name=name,
            actor="Ann",
            line_item=line_item,
            worker=worker,
            total=100,
            asked={"rounds": 100},
            wall_ms=1_000,
        )
    )


def read(database: Database, number: int) -> dict[str, Any]:
    """One row."""
    return database.read(lambda c: rehearsals.one(c, number))


def test_the_usual_course(database: Database) -> None:
    """Queued, running, further on, done with its result; each step with its time."""
    number = begin(database)
    assert read(database, number)["state"] == "queued"
    assert database.write(lambda c: rehearsals.start(c, number, 2_000))
    assert database.write(lambda c: rehearsals.advance(c, number, 40))
    assert read(database, number)["done"] == 40
    database.write(lambda c: rehearsals.end(c, number, "done", 3_000, {"answer": 7}))
    row = read(database, number)
    assert (row["state"], row["done"], row["result"]) == ("done", 100, {"answer": 7})
    assert (row["created_ms"], row["started_ms"], row["ended_ms"]) == (1_000, 2_000, 3_000)
    assert row["asked"] == {"rounds": 100}


def test_what_has_ended_stays_as_it_is(database: Database) -> None:
    """Neither a late end nor a late cancel nor a late start changes it."""
    number = begin(database)
    database.write(lambda c: rehearsals.end(c, number, "failed", 2_000, None, "broken"))
    database.write(lambda c: rehearsals.end(c, number, "done", 3_000, {}))
    database.write(lambda c: rehearsals.stop(c, number, 4_000))
    assert not database.write(lambda c: rehearsals.start(c, number, 5_000))
    assert not database.write(lambda c: rehearsals.advance(c, number, 50))
    row = read(database, number)
    assert (row["state"], row["error"], row["ended_ms"]) == ("failed", "broken", 2_000)


def test_a_cancel_stops_what_waits_and_tells_what_plays(database: Database) -> None:
    """What waits ends at once; what plays hears of it at its next step."""
    waits, plays = begin(database), begin(database)
    database.write(lambda c: rehearsals.start(c, plays, 2_000))
    database.write(lambda c: rehearsals.stop(c, waits, 3_000))
    database.write(lambda c: rehearsals.stop(c, plays, 3_000))
    assert read(database, waits)["state"] == "cancelled"
    assert read(database, plays)["state"] == "running"
    assert not database.write(lambda c: rehearsals.advance(c, plays, 50))
    with pytest.raises(NotFound):
        database.write(lambda c: rehearsals.stop(c, 999, 3_000))


def test_what_nobody_plays_is_lost(database: Database) -> None:
    """It is shown so at once and closed once; what a live worker has stays open."""
    gone, here = begin(database, worker="gone"), begin(database)
    assert read(database, gone)["state"] == "lost"
    assert database.write(lambda c: rehearsals.lose(c, 2_000)) == 1
    assert database.write(lambda c: rehearsals.lose(c, 3_000)) == 0
    assert read(database, gone)["ended_ms"] == 2_000
    assert read(database, here)["state"] == "queued"
    assert database.read(lambda c: rehearsals.open_of(c, WORKER)) == 1


def test_pages_go_back_in_time(database: Database) -> None:
    """Newest first, without results, from below a number on."""
    numbers = [begin(database, name) for name in ("one", "two", "three")]
    first = database.read(lambda c: rehearsals.page(c, None, 2))
    assert [row["name"] for row in first] == ["three", "two"]
    assert "result" not in first[0]
    rest = database.read(lambda c: rehearsals.page(c, numbers[1], 2))
    assert [row["name"] for row in rest] == ["one"]


def test_a_page_holds_only_what_a_key_reaches(database: Database) -> None:
    """Those of the line items named; of none named none, nor what starts from no line item."""
    for name in ("garden", "orchard", ""):
        begin(database, name, line_item=name)
    for only, names in ((["garden"], ["garden"]), ([], []), (None, ["", "orchard", "garden"])):
        rows = database.read(lambda c, only=only: rehearsals.page(c, None, 9, only))  # type: ignore[misc]
        assert [row["name"] for row in rows] == names


def test_only_what_has_ended_is_forgotten(database: Database) -> None:
    """However old, an open one is kept."""
    ended, still = begin(database), begin(database)
    database.write(lambda c: rehearsals.end(c, ended, "done", 2_000, {}))
    assert database.write(lambda c: rehearsals.prune(c, 10_000)) == 1
    assert read(database, still)["number"] == still
    with pytest.raises(NotFound):
        read(database, ended)
