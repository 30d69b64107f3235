"""Paging through logs and streams: whole, in order, and unmoved by rows that come meanwhile."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.ledger.entries import Entry
from service.store import decisions, journal, records
from service.store.database import Database
from service.store.records import Logged
from tests.builders import NAME, UNIT, append, begin, won
from tests.store.test_charting import told


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=lambda: 5_000_000)
    begin(database)
    yield database
    database.close()


def page(database: Database, wish: Logged, limit: int = 10, **how: bool) -> tuple[list[Any], Any]:
    """One page of a log."""
    return database.read(lambda c: records.logged(c, wish, limit, **how))


def walked(database: Database, limit: int, *, newest_first: bool, extra: bool = False) -> list[int]:
    """All pages of decisions, one after the other; between two of them a row may be added."""
    seen, place, first = list[int](), None, True
    while first or place is not None:
        first = False
        ends: dict[str, Any] = {} if place is None else {
            "before" if newest_first else "after": place
        }  # fmt: skip
        rows, place = page(
            database, Logged("decision", NAME, **ends), limit, newest_first=newest_first
        )
        seen += [row.number for row in rows]
        if extra:
            decisions.log(database, [told(7, 10_000)])
            extra = False
    return seen


@pytest.mark.parametrize("limit", [1, 3])
def test_pages_of_any_size_tell_every_row_once(database: Database, limit: int) -> None:
    """Rows of one moment too, which only their numbers tell apart; both ways are mirrored."""
    decisions.log(database, [told(7, at_ms) for at_ms in (10, 20, 20, 20, 30, 5)])
    down = walked(database, limit, newest_first=True)
    assert down == [5, 4, 3, 2, 1, 6]
    assert walked(database, limit, newest_first=False) == down[::-1]


def test_a_row_that_comes_meanwhile_moves_no_page(database: Database) -> None:
    """Going back it is not seen; going on it comes last."""
    decisions.log(database, [told(7, at_ms) for at_ms in (10, 20, 30)])
    assert walked(database, 2, newest_first=True, extra=True) == [3, 2, 1]
    assert walked(database, 2, newest_first=False, extra=True) == [1, 2, 3, 4, 5]


def test_a_page_that_is_just_full_is_the_last(database: Database) -> None:
    """No place is told where nothing further is."""
    decisions.log(database, [told(7, 1), told(7, 2)])
    assert page(database, Logged("decision", NAME), 2)[1] is None
    assert page(database, Logged("decision", NAME), 1)[1] == (2, 2)
    assert page(database, Logged("decision", "nobody")) == ([], None)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("after", "before", "numbers"),
    [
        ((10, 1), (30, 4), [3, 2]),
        ((10, 0), (30, 4), [3, 2, 1]),
        ((20, -1), (20, 2**62), [3, 2]),
        ((30, 4), (10, 1), []),
    ],
)
def test_rows_lie_strictly_between_two_places(
    database: Database, after: tuple[int, int], before: tuple[int, int], numbers: list[int]
) -> None:
    """A place is a moment and a number; the places themselves are left out."""
    decisions.log(database, [told(7, at_ms) for at_ms in (10, 20, 20, 30)])
    rows, _ = page(database, Logged("decision", NAME, after, before))
    assert [row.number for row in rows] == numbers


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("filters", "numbers"),
    [
        ((("bid", True),), [4, 2, 1]),
        ((("pass", True),), [3]),
        ((("reason", "frozen"),), [3]),
        ((("reason", "no_value"),), []),
        ((("set_by", "cap"),), [2]),
        ((("source", "south"),), [4]),
        ((("bid", True), ("source", "north")), [2, 1]),
    ],
)
def test_filters_leave_what_fits(
    database: Database, filters: tuple[tuple[str, object], ...], numbers: list[int]
) -> None:
    """Each alone, and several together."""
    rows = [told(7, 1), told(7, 2, set_by="cap"), told(None, 3), told(7, 4, source="south")]
    decisions.log(database, rows)
    found, place = page(database, Logged("decision", NAME, filters=filters))
    assert ([row.number for row in found], place) == (numbers, None)


def test_the_journal_of_all_and_of_one(database: Database) -> None:
    """By actions if any is named; a line item sees its own rows only."""
    for action, name in (("freeze", NAME), ("thaw", NAME), ("freeze", "*"), ("rate", "*")):
        said = {"wall_ms": 5, "actor": "t", "action": action, "line_item": name, "reason": ""}
        database.write(lambda c, s=said: journal.note(c, detail={}, **s))  # type: ignore[misc]

    def actions(name: str | None, *wanted: str) -> list[str]:
        filters: Any = (("actions", list(wanted)),) if wanted else ()
        rows, _ = page(database, Logged("journal", name, filters=filters))
        return [row.action for row in rows]

    assert actions(None) == ["rate", "freeze", "thaw", "freeze"]
    assert actions(NAME) == ["thaw", "freeze"]
    assert actions(None, "freeze") == ["freeze", "freeze"]
    assert actions(NAME, "rate", "thaw") == ["thaw"]


def test_a_window_of_a_stream_is_of_its_kinds(database: Database) -> None:
    """After one seq and up to another, which belongs to it; another stream stays out."""
    begin(database, id="meadow")
    append(database, won(1), Entry("tick", {}), won(2), Entry("lost", {}))
    append(database, won(3), name="meadow")

    def seqs(after: int, until: int, *kinds: str) -> list[int]:
        rows = database.read(lambda c: records.window(c, NAME, after, until, kinds))
        return [row.seq for row in rows]

    assert seqs(1, 5, "won", "lost") == [2, 4, 5]
    assert seqs(2, 4, "won") == [4]
    assert seqs(4, 4, "won") == []
    assert seqs(0, 99, "reset") == []


def test_balances_and_heads_are_those_of_one_line_item(database: Database) -> None:
    """A head of nobody is 0; a balance is whole nanos."""
    assert database.read(lambda c: records.head(c, NAME)) == 1
    assert append(database, won(1)) == database.read(lambda c: records.head(c, NAME)) == 2
    assert database.read(lambda c: records.head(c, "nobody")) == 0
    assert database.read(lambda c: records.balance(c, NAME)) == {
        **{"budget": UNIT, "target": UNIT, "spent": 0, "held": 0, "unfunded": 0, "disputed": 0}
    }


def test_the_newest_days_are_told_and_no_more(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Newest first; another line item has its own."""
    row = text(
        "INSERT INTO local_day (line_item, day, budget, target, spent, held, over_spent)"
        " VALUES (:name, :day, 9, 9, 1, 2, 0)"
    )
    begin(database, id="meadow")
    names = [(NAME, 1), (NAME, 2), (NAME, 3), ("meadow", 4)]
    rows = [{"name": name, "day": f"2026-01-0{n}"} for name, n in names]
    database.write(lambda c: c.execute(row, rows))
    monkeypatch.setattr(records, "DAYS_MAX", 2)
    found = database.read(lambda c: records.days(c, NAME))
    assert [one["day"] for one in found] == ["2026-01-03", "2026-01-02"]
    assert found[0] == {
        "day": "2026-01-03", "target": 9, "spent": 1, "held": 2, "over_spent": 0
    }  # fmt: skip
