"""How many statements each step may send: on a busy database each costs its way there and back.

Bounds and not figures of a clock, so that they hold on any machine; a step that asks once for
every row, every slice or every line item passes them at once.
"""

from __future__ import annotations

import secrets
from collections.abc import Callable, Iterator
from contextlib import closing
from functools import partial
from typing import Any, TypeVar

import pytest
from sqlalchemy import event

from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.store import changes, charting, learners, leases, outcomes, teachers
from service.store.bookings import Booking
from service.store.database import Database
from service.store.leases import Leased, LeaseRequest
from service.teaching import lawful, lesson
from tests.builders import begin

T = TypeVar("T")
LINE_ITEMS = [f"garden-{number}" for number in range(20)]
BID = 1_000_000
# Lock, slices with their days, configurations with the time, what bids have said; then balances,
# days, slices and entries, once each however many rows there are. SQLite also says BEGIN.
BOOKING_MAX = 9
# Lock, configurations with the time, what bids have said; then balances and entries.
VALUING_MAX = 6
# Lock, service time, configurations, days, who lives (twice: the time, then the workers), freezes,
# what the dead hold; then slices, balances, days and entries.
LEASING_MAX = 13
# Lock, configuration, what is cancelled, the page; then the state, its publishing and the two
# statements of a change number.
TEACHING_MAX = 9


class Statements:
    """Counts what goes to one database."""

    def __init__(self, database: Database) -> None:
        self.count = 0
        event.listen(database.engine, "before_cursor_execute", self._note)

    def of(self, work: Callable[[], T]) -> int:
        """How many statements a piece of work sends."""
        self.count = 0
        work()
        return self.count

    def _note(self, *_: Any) -> None:
        self.count += 1


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    with closing(Database(migrated_url, pool_size=2)) as database:
        for name in LINE_ITEMS:
            begin(database, id=name, budget=10**12)
        yield database


def lease(database: Database, names: list[str]) -> list[Leased]:
    """A slice for each of these line items, in one transaction."""
    wishes = [LeaseRequest(name, secrets.token_bytes(16), 10**9, 10**9) for name in names]
    found = leases.lease(database, "w", wishes, 30)
    return [one for one in found if isinstance(one, Leased)]


def wins(held: Leased, count: int, first: int = 0) -> list[Booking]:
    """So many wins out of one slice, each priced from another snapshot."""
    start = int.from_bytes(held.slice_id)
    counters = range(first, first + count)
    bids = [((start + counter) % 2**128).to_bytes(16) for counter in counters]
    return [
        Booking(
            held.line_item,
            Outcome("won", bid, counter, BID, "default", BID // 2),
            held.slice_id,
            held.day,
            counter,
        )
        for counter, bid in zip(counters, bids, strict=True)
    ]


def test_a_group_takes_no_more_statements_than_one_outcome(database: Database) -> None:
    """One win or a hundred, of one line item or of twenty, each from a snapshot of its own."""
    held = lease(database, LINE_ITEMS)
    assert len(held) == len(LINE_ITEMS)
    statements = Statements(database)
    groups = [
        wins(held[0], 1),
        wins(held[0], 99, first=1),
        [win for one in held[1:] for win in wins(one, 5)],
    ]
    for group in groups:
        assert statements.of(partial(outcomes.book, database, group)) <= BOOKING_MAX


def test_values_of_a_group_take_no_more_statements_than_one(database: Database) -> None:
    """Whatever each needs of its win and of the last reset is read for all of them at once."""
    held = lease(database, LINE_ITEMS[:1])[0]
    won = wins(held, 50)
    outcomes.book(database, won)
    values = [
        Booking(held.line_item, Value(win.event.bid, event, 5)) for win in won for event in "ab"
    ]
    statements = Statements(database)
    for group in (values[:1], values[1:]):
        assert statements.of(partial(outcomes.book, database, group)) <= VALUING_MAX


def test_twenty_leases_take_no_more_statements_than_one(database: Database) -> None:
    """Whoever leases for many line items at once waits as long as for one."""
    lease(database, LINE_ITEMS)  # The first of a day makes the day.
    statements = Statements(database)
    for names in (LINE_ITEMS[:1], LINE_ITEMS):
        assert statements.of(partial(lease, database, names)) <= LEASING_MAX


def test_a_lesson_takes_few_statements_and_a_page_as_few(database: Database) -> None:
    """Its cost is that of the fold, not that of asking."""
    held = lease(database, LINE_ITEMS[:1])[0]
    statements = Statements(database)
    for group in (wins(held, 1), wins(held, 99, first=1)):
        outcomes.book(database, group)
        teach = partial(teachers.teach, database, held.line_item, lesson, 10_000, lawful)
        assert statements.of(teach) <= TEACHING_MAX


def test_counting_for_charts_takes_few_statements(database: Database) -> None:
    """One to find who is behind, then a page, its mark and its counts for each line item."""
    held = lease(database, LINE_ITEMS[:1])[0]
    charting.roll(database)
    outcomes.book(database, wins(held, 100))
    # BEGIN stands before each of the three on SQLite.
    assert Statements(database).of(partial(charting.roll, database)) <= 7


def test_lessons_of_many_line_items_share_a_commit(database: Database) -> None:
    """Each publishes its own state, and the change numbers are taken once for all of them."""
    names, statements = LINE_ITEMS[:8], Statements(database)
    for held in lease(database, names):
        outcomes.book(database, wins(held, 1))
    read = dict[str, int]()

    def work() -> None:
        read.update(teachers.teach_together(database, names, lesson, 10_000, lawful))

    # Lock, configuration, cancelled, page, state and publishing of each; then the numbers.
    assert statements.of(work) <= 6 * len(names) + 3
    assert set(read.values()) == {3}
    found = database.read(lambda c: learners.snapshots(c, names))
    assert {one.seq for one in found.values()} == {3}
    assert len(database.read(lambda c: changes.since(c, 0))) == len(names)
