"""A line item's own log with what became of each bid, as a replay reads it."""

from __future__ import annotations

from base64 import urlsafe_b64encode
from collections.abc import Iterator
from typing import Any

import pytest

from service.ledger.entries import Entry
from service.store import decisions, past_decisions
from service.store.database import Database
from tests.builders import NAME, append, begin, valued
from tests.store.test_decisions import BID, PASS

NOW_MS = 5_000_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=lambda: NOW_MS)
    begin(database)
    yield database
    database.close()


def decided(number: int | None, at_ms: int, **more: Any) -> dict[str, Any]:
    """A bid with this number, or a pass."""
    ref = None if number is None else ref_of(number)
    row = PASS if number is None else BID
    return {**row, "line_item": NAME, "ref": ref, "at_ms": at_ms, **more}


def ref_of(number: int) -> str:
    """The reference of a bid as tickets carry it."""
    return urlsafe_b64encode(number.to_bytes(16)).decode().rstrip("=")


def outcome(kind: str, number: int, price: int | None = 600) -> Entry:
    """What came of a bid of 1000."""
    body = {"bid": 1000, "price": price, "to_win": None, "auction": "second", "round": 1}
    return Entry(kind, {**body, "late": False}, number.to_bytes(16), "result")


def read(database: Database, newest: int = 100, *, accrues: bool = False) -> list[dict[str, Any]]:
    """The log as a replay reads it."""
    return database.read(lambda c: past_decisions.past_decisions(c, NAME, newest, accrues=accrues))


def test_a_log_of_nothing_is_empty(database: Database) -> None:
    """Entries alone, whose bids were never logged, make no decision."""
    append(database, outcome("won", 1))
    assert read(database) == []


def test_each_decision_has_what_became_of_it(database: Database) -> None:
    """Won and worth something, lost, silent, and a pass; oldest first."""
    rows = [decided(n, 10 + n) for n in (1, 2, 3)]
    decisions.log(database, [*rows, decided(None, 20)])
    append(database, outcome("won", 1), outcome("lost", 2, None), valued(1, 70))
    plain = {"source": "north", "floor": 400_000}
    told = {"told_ms": NOW_MS, "bid": 1000, "to_win": None, "auction": "second"}
    assert read(database) == [
        {"at_ms": 11, **plain, **told, "kind": "won", "price": 600, "value": 70,
         "valued_ms": NOW_MS},
        {"at_ms": 12, **plain, **told, "kind": "lost", "price": None},
        {"at_ms": 13, **plain},
        {"at_ms": 20, **plain},
    ]  # fmt: skip


def test_the_newest_are_kept_when_there_are_too_many(database: Database) -> None:
    """In order of the log, whatever its stamps say."""
    decisions.log(database, [decided(n, 100 - n) for n in range(1, 6)])
    assert [one["at_ms"] for one in read(database, 2)] == [96, 95]


def test_test_bids_and_other_line_items_are_left_out(database: Database) -> None:
    """Neither costs anybody anything here."""
    other = decided(2, 2, line_item="meadow")
    decisions.log(database, [decided(1, 1, test=1), other, decided(3, 3)])
    assert [one["at_ms"] for one in read(database)] == [3]


@pytest.mark.parametrize(("accrues", "value"), [(True, 0), (False, None)])
def test_a_win_without_word_is_worth_nothing_only_where_values_accrue(
    database: Database, accrues: bool, value: int | None
) -> None:
    """Where each win has its one word it is not known yet; a loss is worth nothing either way."""
    decisions.log(database, [decided(1, 1), decided(2, 2)])
    append(database, outcome("won", 1), outcome("lost", 2))
    won, lost = read(database, accrues=accrues)
    assert won.get("value") == value
    assert "value" not in lost


def test_corrections_replace_and_several_events_add(database: Database) -> None:
    """50 corrected to 20, and 5 of another event: 25 in all, first heard of at the first."""
    decisions.log(database, [decided(1, 1)])
    append(database, outcome("won", 1), valued(1, 50), valued(1, 20, "a2", was=50))
    append(database, valued(1, 5, "b"))
    (one,) = read(database, accrues=True)
    assert (one["value"], one["valued_ms"]) == (25, NOW_MS)


def test_more_decisions_than_one_look_holds_lose_nothing(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Read in pieces of two, in the same order, each with its own outcome."""
    decisions.log(database, [decided(n, n) for n in range(1, 6)])
    append(database, *(outcome("won", n, 100 * n) for n in range(1, 6)))
    whole = read(database)
    monkeypatch.setattr(past_decisions, "PAGE", 2)
    assert read(database) == whole
    assert [one["price"] for one in whole] == [100, 200, 300, 400, 500]
