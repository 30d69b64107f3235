"""Sums over all line items, exact and alike on both databases."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import closing
from functools import partial

import pytest
from sqlalchemy import text

from service.ledger.entries import Entry
from service.store import freezes, line_items
from service.store.books import Books
from service.store.database import Database, Writing
from service.store.gauges import PARTS, measure
from service.store.learners import begin
from service.teaching import FRESH
from tests.builders import line_item

WALL_MS = 1_700_000_000_000
HUGE = 4 * 10**18  # Three of them are beyond 64 bits.


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    with closing(Database(migrated_url)) as database:
        yield database


def add(database: Database, name: str, currency: str, budget: int) -> None:
    """One line item with a learner."""

    def work(connection: Writing) -> None:
        line_items.create(connection, line_item(id=name, currency=currency, budget=budget), 1)
        begin(connection, name, FRESH, 1)

    database.write(work)


def test_money_is_summed_per_currency_beyond_what_a_column_holds(database: Database) -> None:
    """No sum overflows, none loses a nano, and no currency is added to another."""
    for place in range(3):
        add(database, f"euro-{place}", "EUR", HUGE + place)
    add(database, "yen", "JPY", 7)
    spend = text("UPDATE balance SET spent = :spent WHERE line_item = 'euro-1'")
    database.write(lambda c: c.execute(spend, {"spent": 1_234_567_891}))
    money = database.read(lambda c: measure(c, WALL_MS))["money"]
    assert money["EUR"]["budget"] == str(3 * HUGE + 3)
    assert money["EUR"]["spent"] == "1234567891"
    assert money["JPY"] == dict.fromkeys(PARTS, "0") | {"budget": "7"}


def test_what_learners_have_not_read_is_counted_and_aged(database: Database) -> None:
    """Entries over all line items, and the age of the oldest by service time."""
    add(database, "a", "EUR", HUGE)
    add(database, "b", "EUR", HUGE)
    seq = "(SELECT seq FROM balance b WHERE b.line_item = learner.line_item)"
    read = text(f"UPDATE learner SET seq = {seq}")  # noqa: S608 - Words of our own.
    database.write(lambda c: c.execute(read))
    quiet = database.read(lambda c: measure(c, WALL_MS))
    assert (quiet["learner_lag_entries"], quiet["learner_lag_seconds"]) == (0, 0)

    def post(connection: Writing) -> None:
        for name, count in (("a", 2), ("b", 1)):
            books = Books(connection, [name], WALL_MS)
            for _ in range(count):
                books.post(name, Entry("reset", {"actor": "t", "reason": "t"}))
            books.save()

    database.write(post)
    later = text("UPDATE service_clock SET now_ms = now_ms + 4000")
    database.write(lambda c: c.execute(later))
    late = database.read(lambda c: measure(c, WALL_MS))
    assert (late["learner_lag_entries"], late["learner_lag_seconds"]) == (3, 4000)


def test_freezes_are_counted_by_source(database: Database) -> None:
    """What stands still is seen with who stopped it; what nobody froze is there with nought."""

    def put(connection: Writing, name: str, source: str) -> None:
        freezes.put(connection, name, source, wall_ms=1, actor="t", reason="t")

    add(database, "a", "EUR", HUGE)
    for name, source in (("a", "person"), ("a", "tripwire"), ("*", "all")):
        database.write(partial(put, name=name, source=source))
    seen = database.read(lambda c: measure(c, WALL_MS))
    assert {source: n for source, n in seen["freezes"].items() if n} == {
        "person": 1, "tripwire": 1, "all": 1
    }  # fmt: skip
    assert seen["freezes"]["audit"] == 0
    assert seen["line_items"] == 1
    assert seen["ledger_read_timestamp_seconds"] == WALL_MS
