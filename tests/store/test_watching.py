"""What the watch page reads: the right numbers, on both databases, in a fixed number of queries."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pytest
from sqlalchemy import event, text

from service.feedback import Report
from service.store import decisions, freezes, journal, watching
from service.store.database import Database
from tests.builders import NAME, UNIT, append, begin, valued, won, working

NOW_MS = 1_764_600_000_000  # 2025-12-01T14:40:00Z.
HOUR_MS = 3_600_000


@pytest.fixture
def database(migrated_url: str) -> Iterator[Database]:
    """A migrated database whose service clock has seen a day."""
    opened = Database(migrated_url, wall_ms=lambda: NOW_MS)
    clock = text("UPDATE service_clock SET now_ms = 5000, seen_ms = :now")
    opened.write(lambda connection: connection.execute(clock, {"now": NOW_MS}))
    yield opened
    opened.close()


def decided(name: str, ago_ms: int, **changes: Any) -> dict[str, Any]:
    """One row of the decision log: a bid of 1 CPM by the value, unless it says otherwise."""
    row = {"at_ms": NOW_MS - ago_ms, "line_item": name, "ref": None, "request_id": None}
    row |= {"source": "default", "floor": 0, "price": 1_000_000, "reason": None}
    return row | {"set_by": "value", "snapshot": 1, "test": 0} | changes


@contextmanager
def counted(database: Database) -> Iterator[list[str]]:
    """The statements that run meanwhile."""
    statements: list[str] = []

    def note(_c: Any, _cursor: Any, statement: str, *_rest: Any) -> None:
        statements.append(statement)

    event.listen(database.engine, "before_cursor_execute", note)
    yield statements
    event.remove(database.engine, "before_cursor_execute", note)


def overview(database: Database) -> watching.Overview:
    """Everything, as a worker that has just started reads it."""
    return database.read(lambda c: watching.overview(c, watching.configs(c, None)))


def test_a_line_item_stands_with_its_money_and_freezes(database: Database) -> None:
    """Balance, freezes of its own and the switch over all come in one look."""
    begin(database)
    frozen: dict[str, Any] = {"wall_ms": NOW_MS, "actor": "tester", "reason": "odd"}
    database.write(lambda c: freezes.put(c, NAME, "tripwire", **frozen))
    database.write(lambda c: freezes.put(c, "*", "all", **frozen))
    found = overview(database)
    (one,) = found.standings
    assert (one.id, one.balance["budget"], one.halted, one.day) == (NAME, UNIT, False, None)
    assert [freeze["source"] for freeze in one.freezes] == ["tripwire"]
    assert [freeze["source"] for freeze in found.all_freezes] == ["all"]
    assert found.wall_ms == NOW_MS


FOUND = """INSERT INTO tripwire_finding (line_item, rule, action, saw, numbers, since_ms, raised_ms,
    seen_ms, cleared_ms) VALUES ('garden', 'value_rate', 'warn', :saw, '{}', 1, 1, 1, :cleared)"""


def test_what_tripwires_see_now_is_told(database: Database) -> None:
    """Open findings in their own words; what has passed is history."""
    begin(database)
    for said, cleared in (("80 where 16 are usual", None), ("long ago", 2)):
        row = {"saw": said, "cleared": cleared}
        database.write(lambda c, row=row: c.execute(text(FOUND), row))  # type: ignore[misc]
    (one,) = overview(database).standings
    assert one.findings == ("value rate: 80 where 16 are usual",)


@pytest.mark.anyio
async def test_open_holds_and_the_day_are_those_of_the_books(migrated_url: str) -> None:
    """What bids hold is held until the grace of their slice ends; the day counts what was won."""
    async with working(migrated_url) as worker:
        await worker.create(daily_budget=UNIT // 2)
        first, _ = await worker.bids(2)
        await worker.report(Report(ticket=first.ticket, kind="won", clearing=600_000))
        (one,) = overview(worker.database).standings
        row = worker.balance()
        assert one.open_holds == row["held"] > 0
        assert one.day is not None
        assert one.day["spent"] == row["spent"] == 600_000
        close_ms = worker.one("SELECT max(close_ms) FROM slice")
        clock = worker.one("SELECT seen_ms - now_ms FROM service_clock")
        assert one.holds_end_ms == close_ms + clock


def test_the_latest_of_a_line_item_is_told(database: Database) -> None:
    """Last price, the one an hour ago, the share at the cap and the commonest pass."""
    begin(database)
    capped = [decided(NAME, 1000 + n, set_by="cap", price=8_000_000) for n in range(3)]
    under = [decided(NAME, 500, price=None, reason="under_floor", set_by=None) for _ in range(2)]
    test = [decided(NAME, 10, price=7, test=1)]
    old = [decided(NAME, HOUR_MS + 5000, price=500_000), decided(NAME, HOUR_MS - 5000, price=1)]
    decisions.log(database, [*old, *capped, *under, *test])
    found = database.read(lambda c: watching.latest(c, [NAME], NOW_MS))[NAME]
    assert (found.price, found.price_ms) == (8_000_000, NOW_MS - 1000)
    assert found.price_hour_ago == 500_000
    assert (found.bids, found.bids_at_cap, found.set_by) == (5, 3, "cap")
    assert (found.passes, found.top_pass) == (2, "under_floor")


def test_ages_come_from_the_stream(database: Database) -> None:
    """The last win and value have their moments; what never came has none."""
    begin(database)
    append(database, won(1), valued(1, 10_000_000))
    found = database.read(lambda c: watching.latest(c, [NAME], NOW_MS))[NAME]
    assert set(found.feed) == {"won", "value"}


def test_only_the_newest_decisions_are_weighed(database: Database) -> None:
    """What lies behind the newest two hundred no longer counts."""
    begin(database)
    old = [decided(NAME, 10_000 + n, set_by="cap") for n in range(150)]
    decisions.log(database, [*old, *(decided(NAME, 200 - n) for n in range(200))])
    found = database.read(lambda c: watching.latest(c, [NAME], NOW_MS))[NAME]
    assert (found.bids, found.bids_at_cap) == (200, 0)


def test_more_line_items_cost_no_more_queries(database: Database) -> None:
    """The number of statements is the same for two line items and for twelve."""
    counts = []
    for span in (range(2), range(2, 12)):
        for number in span:
            begin(database, id=f"garden-{number}")
        ids = [f"garden-{number}" for number in range(span.stop)]
        with counted(database) as statements:
            overview(database)
            database.read(lambda c, ids=ids: watching.latest(c, ids, NOW_MS))  # type: ignore[misc]
        counts.append(len(statements))
    assert counts[0] == counts[1] < 20


def test_the_journal_of_some_line_items_hides_the_others(database: Database) -> None:
    """A limited reader sees its own rows and the switch over all, newest first, but no keys."""
    for name, action in (("a", "freeze"), ("b", "freeze"), ("*", "freeze"), ("*", "key_add")):
        said = {"wall_ms": NOW_MS, "actor": "tester", "action": action, "reason": "odd"}
        database.write(
            lambda c, name=name, said=said: journal.note(c, line_item=name, detail={}, **said)  # type: ignore[misc]
        )
    mine = database.read(lambda c: watching.journal(c, ["a"], 10))
    everything = database.read(lambda c: watching.journal(c, None, 10))
    assert [row["line_item"] for row in mine] == ["*", "a"]
    assert [row["line_item"] for row in everything] == ["*", "*", "b", "a"]


def test_the_tail_of_a_stream_is_newest_first(database: Database) -> None:
    """So many entries and no more."""
    begin(database)
    append(database, won(1), won(2), won(3))
    rows = database.read(lambda c: watching.entries(c, NAME, 2))
    assert [row["seq"] for row in rows] == [4, 3]
