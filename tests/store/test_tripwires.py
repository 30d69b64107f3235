"""Sums of line items in their table: added once, read in part, forgotten in pieces."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import pytest
from sqlalchemy import text

from service.ledger.entries import Entry
from service.store import tripwires
from service.store.database import Database
from service.store.tripwires import DAYS, HOURS, MINUTES, Standing
from service.tripwires.counts import Counts
from tests.builders import NAME, append, begin, won

NOW_MS = 10_000_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=lambda: NOW_MS)
    begin(database)
    yield database
    database.close()


def active(database: Database, due_ms: int = 0, after: str = "", now_ms: int = NOW_MS) -> list[str]:
    """Ids of the line items to look at."""
    found = database.read(lambda c: tripwires.active(c, due_ms, now_ms, after))
    return [one.line_item for one in found]


def standing(database: Database, name: str = NAME) -> Standing:
    """How a line item stands, whenever it was looked at."""
    found = database.read(lambda c: tripwires.active(c, 2**60, 2**60, ""))
    return next(one for one in found if one.line_item == name)


def advance(
    database: Database, of: Standing, seq: int, sums: dict[tuple[int, int], Counts], at_ms: int = 0
) -> bool:
    """Add what was counted."""
    return database.write(lambda c: tripwires.advance(c, of, seq, at_ms, sums))


def buckets(database: Database, width: int, from_ms: int = 0, name: str = NAME) -> list[int]:
    """Where the buckets of a width begin."""
    return [at for at, _ in database.read(lambda c: tripwires.buckets(c, name, width, from_ms))]


def run(database: Database, statement: str) -> None:
    """Change a row behind the store's back."""
    database.write(lambda c: c.execute(text(statement)))


def test_a_line_item_that_nobody_looked_at_is_due(database: Database) -> None:
    """Its stream has begun and nothing of it is counted."""
    assert standing(database) == Standing(NAME, 1, 0, (0, 0, 0), (0, 0, 0))
    assert active(database) == [NAME]


def test_line_items_are_walked_by_id(database: Database, monkeypatch: pytest.MonkeyPatch) -> None:
    """So many at a time, going on behind the last, and empty at the end."""
    monkeypatch.setattr(tripwires, "ACTIVE_MAX", 2)
    for name in ("a", "z"):
        begin(database, id=name)
    assert active(database) == ["a", NAME]
    assert active(database, after=NAME) == ["z"]
    assert active(database, after="z") == []


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("looked_ms", "due_ms", "due"),
    [(100, 99, False), (100, 100, True), (NOW_MS, 99, False), (NOW_MS + 1, 99, True)],
)
def test_nobody_is_looked_at_twice_within_a_bucket(
    database: Database, looked_ms: int, due_ms: int, due: bool
) -> None:
    """Unless the wall clock was set back, or it would be blind until that has caught up."""
    advance(database, standing(database), 1, {}, looked_ms)
    append(database, won(1))
    assert active(database, due_ms) == ([NAME] if due else [])


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("statement", "due"),
    [
        ("UPDATE balance SET budget = budget + 1", False),
        ("UPDATE balance SET unfunded = 5", True),
        ("UPDATE balance SET disputed = 5", True),
        ("UPDATE learner SET halted = 1", True),
        ("INSERT INTO refused_outcomes (line_item, refusals) VALUES ('garden', 1)", True),
    ],
)
def test_whatever_a_rule_may_see_makes_a_line_item_due(
    database: Database, statement: str, due: bool
) -> None:
    """Money that should not be, a halt, a refusal; not an edit of the budget."""
    advance(database, standing(database), 1, {}, 0)
    assert active(database) == []
    run(database, statement)
    assert active(database) == ([NAME] if due else [])


def test_counts_are_added_once_by_whoever_is_first(database: Database) -> None:
    """The second clerk read the same entries and its sums are left out, both at the first look."""
    of, sums = standing(database), {(MINUTES, 0): Counts(bids=3), (HOURS, 0): Counts(bids=3)}
    assert advance(database, of, 1, sums)
    assert not advance(database, of, 1, sums)
    later = replace(of, seq=1)
    assert advance(database, later, 4, {(MINUTES, 0): Counts(bids=2, paid=2**40)})
    assert not advance(database, later, 4, {(MINUTES, 0): Counts(bids=2)})
    found = database.read(lambda c: tripwires.buckets(c, NAME, MINUTES, 0))
    assert found == [(0, tuple(Counts(bids=5, paid=2**40)))]
    assert buckets(database, HOURS) == [0]


def test_sums_may_take_away_what_has_moved_back(database: Database) -> None:
    """Gauges fall as well as rise, and a bucket holds how much."""
    of = standing(database)
    advance(database, of, 1, {(DAYS, 0): Counts(unfunded=5)})
    advance(database, replace(of, seq=1), 2, {(DAYS, 0): Counts(unfunded=-7)})
    ((_, sums),) = database.read(lambda c: tripwires.buckets(c, NAME, DAYS, 0))
    assert Counts(*sums).unfunded == -2


def test_a_look_remembers_what_the_gauges_stood_at(database: Database) -> None:
    """So that the next one counts only what has moved since."""
    run(database, "UPDATE balance SET unfunded = 5, disputed = 6")
    run(database, "UPDATE learner SET halted = 1")
    assert database.read(lambda c: tripwires.gauges(c, NAME)) == (5, 6, 1)
    of = standing(database)
    assert (of.gauges, of.gauges_seen) == ((5, 6, 1), (0, 0, 0))
    advance(database, of, 1, {})
    assert standing(database).gauges_seen == (5, 6, 1)


def test_entries_come_in_pages_and_damage_is_empty(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each page says how far it went; a body that is no object counts for nothing."""
    monkeypatch.setattr(tripwires, "ENTRIES_MAX", 2)
    append(database, won(1), Entry("tick", {"rounds": 1}), won(2))
    run(database, "UPDATE stream SET body = '[1' WHERE seq = 2")
    run(database, "UPDATE stream SET body = '[1]' WHERE seq = 3")
    pages, seq = [], 1
    while True:
        page, at = database.read(lambda c, s=seq: tripwires.entries(c, NAME, s))  # type: ignore[misc]
        if not page:
            break
        pages.append([(kind, bool(body)) for _, kind, _, body, _ in page])
        seq = at
    assert pages == [[("won", False), ("tick", False)], [("won", True)]]
    assert database.read(lambda c: tripwires.entries(c, NAME, 4)) == ([], 4)


def test_only_the_hours_that_rules_look_at_are_read(database: Database) -> None:
    """All from a moment on, and before it those at two places of each day and the first of all."""
    day, at = 240, range(0, 960, 10)
    sums = {(HOURS, start): Counts(bids=1) for start in at}
    advance(database, standing(database), 1, sums)
    found = database.read(lambda c: tripwires.buckets(c, NAME, HOURS, 100, (900, day, 30, 200)))
    assert [start for start, _ in found] == [
        100, 200, 270, 440, 510, 680, 750, *range(900, 960, 10)
    ]  # fmt: skip
    assert buckets(database, HOURS, 900) == list(range(900, 960, 10))


def test_refusals_are_taken_once_and_only_of_line_items_we_have(database: Database) -> None:
    """Forged ids leave nothing behind; another line item keeps its own."""
    begin(database, id="z")
    for _ in range(2):
        counts = {NAME: 2, "z": 1, "nobody": 9}
        database.write(lambda c, n=counts: tripwires.refuse(c, n))  # type: ignore[misc]
    taken = [database.write(lambda c: tripwires.take_refusals(c, NAME)) for _ in range(2)]
    assert taken == [4, 0]
    assert database.write(lambda c: tripwires.take_refusals(c, "z")) == 2
    assert database.write(lambda c: tripwires.take_refusals(c, "nobody")) == 0


def test_buckets_are_forgotten_in_pieces_and_by_width(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Minutes long before days; what begins at the moment stays."""
    monkeypatch.setattr(tripwires, "PRUNED_MAX", 2)
    sums = {(width, start): Counts(1) for width in (MINUTES, DAYS) for start in range(5)}
    advance(database, standing(database), 1, sums)
    pruned = [database.write(lambda c: tripwires.prune(c, MINUTES, 3)) for _ in range(3)]
    assert pruned == [2, 1, 0]
    assert buckets(database, MINUTES) == [3, 4]
    assert buckets(database, DAYS) == [0, 1, 2, 3, 4]
