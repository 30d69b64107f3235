"""Pages of what was recorded: they use their indexes, find moments, and end where they must."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import pytest
from sqlalchemy import event, text

from service.ledger.entries import Entry
from service.store import charting, decisions, records
from service.store.database import Database, Reading
from service.store.records import Logged
from tests.builders import NAME, append, begin, won
from tests.store.test_charting import Wall, told

ROWS = 1500


@pytest.fixture(name="wall")
def _wall() -> Wall:
    return Wall()


@pytest.fixture(name="database")
def _database(migrated_url: str, wall: Wall) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=wall)
    begin(database)
    yield database
    database.close()


def fill(database: Database) -> None:
    """Enough rows of two line items that a database would rather not read them all."""
    rows = [told(1000 + n if n % 3 else None, 1000 * n) for n in range(ROWS)]
    other = [{**row, "line_item": "b"} for row in rows]
    decisions.log(database, [row for pair in zip(rows, other, strict=True) for row in pair])
    append(database, *[won(n) for n in range(200)], *[Entry("tick", {})] * 200)
    journal = "INSERT INTO journal (at_ms, actor, action, line_item, reason, detail)"
    values = "VALUES (:n, 'x', 'freeze', :name, '', '{}')"
    rows = [{"n": n, "name": NAME if n % 2 else "b"} for n in range(ROWS)]
    database.write(lambda c: c.execute(text(f"{journal} {values}"), rows))
    database.write(lambda c: c.execute(text("ANALYZE")))


def plans(database: Database, work: Callable[[Reading], object]) -> str:
    """How the database means to run each statement of a read."""
    found = list[str]()
    explain = "EXPLAIN QUERY PLAN " if database.is_sqlite else "EXPLAIN "

    def look(connection: Any, cursor: Any, statement: str, values: Any, *_: object) -> None:
        if statement.startswith("SELECT"):
            beside = connection.connection.cursor()
            beside.execute(explain + statement, values)
            found.extend(str(row) for row in beside.fetchall())
            beside.close()

    def run(connection: Reading) -> None:
        event.listen(connection, "before_cursor_execute", look)
        work(connection)

    database.read(run)
    return "\n".join(found)


READS: dict[str, tuple[Callable[[Reading], object], str]] = {
    "a page of decisions by time": (
        lambda c: records.logged(c, Logged("decision", NAME, (700_000, -1), (900_000, -1)), 50),
        "decision_by_time",
    ),
    "a page of passes": (
        lambda c: records.logged(c, Logged("decision", NAME, filters=(("pass", True),)), 50),
        "decision_by_time",
    ),
    "decisions in order": (
        lambda c: records.logged(c, Logged("decision", NAME, (9, 9)), 50, newest_first=False),
        "decision_by_time",
    ),
    "the journal of one": (
        lambda c: records.logged(c, Logged("journal", NAME), 50),
        "journal_by_line_item",
    ),
    "the journal of all": (
        lambda c: records.logged(c, Logged("journal", None, (700, -1)), 50),
        "journal_by_time",
    ),
    "one kind of the stream": (
        lambda c: records.entries(c, NAME, 0, 400, ["tick"], 50),
        "stream_by_kind",
    ),
    "a moment of the stream": (
        lambda c: records.seq_before(c, NAME, 5),
        "stream_pkey|sqlite_autoindex_stream_1",
    ),
}


def test_every_page_is_read_by_its_index(database: Database) -> None:
    """No plan scans or sorts a table, however many rows it has."""
    fill(database)
    for name, (work, indexes) in READS.items():
        plan = plans(database, work)
        assert any(index in plan for index in indexes.split("|")), (name, plan)
        for table in ("decision", "stream", "journal"):
            assert f"SCAN {table}" not in plan, (name, plan)
            assert f"Seq Scan on {table}" not in plan, (name, plan)
        # An outer sort of the few that fit is free; beneath it rows come in order already.
        if "of passes" not in name:
            assert "Sort" not in plan, (name, plan)
            assert "TEMP B-TREE" not in plan, (name, plan)


def test_a_chart_is_read_by_its_key(database: Database) -> None:
    """It reads the five minutes it shows, and no decision."""
    row = "INSERT INTO chart_count VALUES (:name, :at, 'bid', :bin, 1, 1)"
    names = [NAME, "b"]
    rows = [{"name": n, "at": 300_000 * t, "bin": "40"} for n in names for t in range(ROWS)]
    database.write(lambda c: c.execute(text(row), rows))
    database.write(lambda c: c.execute(text("ANALYZE")))
    plan = plans(database, lambda c: charting.chart(c, NAME, 0, 600_000))
    assert "decision" not in plan
    assert "stream" not in plan
    assert ("chart_count_pkey" in plan) or ("PRIMARY KEY (line_item=? AND at_ms" in plan), plan


def test_a_moment_is_found_by_halving(database: Database, wall: Wall) -> None:
    """The last seq stamped before it, on the edge of equal stamps and beyond both ends."""
    wall.ms = 10 * 86_400_000
    stamps = [wall.ms + ms for ms in (0, 0, 5, 5, 5, 9)]
    for at_ms in stamps:
        wall.ms = at_ms
        append(database, Entry("tick", {}))
    # The entry that made the line item was stamped by its builder, long before.
    all_stamps = [1, *stamps]
    for at_ms in (0, 1, 2, *(stamp + more for stamp in stamps for more in (-1, 0, 1))):
        found = database.read(lambda c, at=at_ms: records.seq_before(c, NAME, at))  # type: ignore[misc]
        assert found == sum(stamp < at_ms for stamp in all_stamps)
    assert database.read(lambda c: records.seq_before(c, "nobody", 5)) == 0


def test_a_rare_row_costs_a_bounded_look(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A page ends after so many rows that do not fit, says where to go on, and finds them all."""
    rows = [told(1000, n) for n in range(100)]
    rows[7], rows[70] = told(None, 7, reason="rare"), told(None, 70, reason="rare")
    decisions.log(database, rows)
    monkeypatch.setattr(records, "LOOKED_AT_MAX", 30)
    wish, pages = Logged("decision", NAME, filters=(("reason", "rare"),)), []
    while True:
        found, place = database.read(lambda c, w=wish: records.logged(c, w, 10))  # type: ignore[misc]
        pages.append([row.at_ms for row in found])
        if place is None:
            break
        wish = Logged("decision", NAME, before=place, filters=wish.filters)
    assert pages == [[70], [], [], [7]]


def test_kinds_are_merged_in_order(database: Database) -> None:
    """Both ways, cut at the limit, between two seqs that are left out."""
    append(database, *[won(1), Entry("tick", {}), won(2), Entry("tick", {}), Entry("lost", {})])

    def seqs(kinds: list[str], limit: int, newest: bool) -> list[int]:
        rows = database.read(
            lambda c: records.entries(c, NAME, 2, 7, kinds, limit, newest_first=newest)
        )
        return [row.seq for row in rows]

    assert seqs([], 9, True) == [6, 5, 4, 3]
    assert seqs(["won", "tick"], 9, True) == [5, 4, 3]
    assert seqs(["tick", "won"], 2, False) == [3, 4]
    assert seqs(["reset"], 9, True) == []


def test_open_slices_say_when_they_end(database: Database) -> None:
    """On the wall clock, the one that ends first in front; a strict one never by itself."""
    row = (
        "INSERT INTO slice (id, line_item, worker, day, amount, remaining, owed, ticked, counted,"
        " state, leased_ms, expires_ms, close_ms, billing_close_ms) VALUES (:id, :name, 'w', 'd',"
        " 5, :left, 0, 0, 0, :state, 0, :end, :end, :end)"
    )
    database.write(lambda c: c.execute(text("UPDATE service_clock SET now_ms = 10, seen_ms = 99")))
    ends = [(1, 5, "open", 2**60), (2, 5, "retired", 30), (3, 0, "closed", 20)]
    rows = [
        {"id": bytes([n] * 16), "name": NAME, "left": left, "state": state, "end": end}
        for n, left, state, end in ends
    ]
    database.write(lambda c: c.execute(text(row), rows))
    found = database.read(lambda c: records.open_slices(c, NAME))
    assert [(one["state"], one["close_ms"]) for one in found] == [("retired", 119), ("open", None)]
