"""The working copies of locked money: read, moved, and written back by adding, or not at all."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise
from service.ledger.accounts import Day, Movement, Slice
from service.ledger.entries import Entry
from service.store.books import Books
from service.store.database import Database, Reading, Writing
from tests.builders import NAME, begin, pass_service_ms

DAY = "2026-12-01"
ID = b"s" * 16
TIMES = {"leased_ms": 0, "expires_ms": 1, "close_ms": 2, "billing_close_ms": 3}
NOTE = Entry("mark", {"n": 1})
SELECTS = {
    "balance": text("SELECT * FROM balance ORDER BY line_item"),
    "local_day": text("SELECT * FROM local_day"),
    "slice": text("SELECT * FROM slice"),
    "stream": text("SELECT * FROM stream ORDER BY line_item, seq"),
}


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    """A line item of 100 nanos whose one slice of 40 is out, on a day of 60."""
    database = Database(migrated_url)
    begin(database, budget=100)

    def leased(books: Books) -> None:
        books.open_day(NAME, DAY, 60)
        books.new_slice(Slice(ID, NAME, "w", DAY, 40, 40, 0, 0, 0, "open"), TIMES)
        books.post(NAME, Entry("lease", {}), Movement(held=40), day=DAY)

    keep(database, leased)
    yield database
    database.close()


def keep(
    database: Database, work: Callable[[Books], object], names: str = NAME, wall_ms: int = 50
) -> Books:
    """Do some work on the books of these line items, and save them."""

    def all_of_it(connection: Writing) -> Books:
        books = Books(connection, names.split(), wall_ms)
        books.load_slices([ID])
        work(books)
        books.save()
        return books

    return database.write(all_of_it)


def rows(database: Database, table: str) -> list[dict[str, Any]]:
    """Every row of a table."""

    def read(connection: Reading) -> list[dict[str, Any]]:
        return [dict(row._mapping) for row in connection.execute(SELECTS[table])]

    return database.read(read)


def everything(database: Database) -> list[list[dict[str, Any]]]:
    """Every row of every table of money."""
    return [rows(database, table) for table in SELECTS]


def test_a_movement_reaches_balance_day_and_slice(database: Database) -> None:
    """Each takes its own part of it; the entry says what happened."""
    paid = Movement(spent=6, held=-8, remaining=-8, day_spent=6, disputed=2)
    entry = Entry("won", {"price": 8}, b"b" * 16, "result", 8)
    keep(database, lambda books: books.post(NAME, entry, paid, day=DAY, slice_id=ID))

    balance, day, part = (rows(database, t)[0] for t in ("balance", "local_day", "slice"))
    assert (balance["spent"], balance["held"], balance["disputed"]) == (6, 32, 2)
    assert (day["spent"], day["held"], day["over_spent"]) == (6, 32, 0)
    assert (part["remaining"], part["owed"], part["amount"]) == (32, 0, 40)
    written = rows(database, "stream")[-1]
    assert (written["seq"], written["kind"], bytes(written["bid"])) == (3, "won", b"b" * 16)
    assert (written["slot"], written["cost"], written["body"]) == ("result", 8, '{"price":8}')


def test_what_was_not_touched_is_not_written(database: Database) -> None:
    """Books that were only read leave every row as it was."""
    before = everything(database)
    books = keep(database, lambda books: books.post(NAME, None))
    assert list(books.slices) == [ID]
    assert list(books.days) == [(NAME, DAY)]
    assert everything(database) == before


def test_what_does_not_exist_is_not_there(database: Database) -> None:
    """Neither a line item, nor a slice, nor a day is made by asking for it."""

    def ask(books: Books) -> None:
        books.load_slices([b"x" * 16])
        books.load_days([(NAME, "2026-12-02")])

    books = keep(database, ask, "nobody garden")
    assert (list(books.accounts), len(books.slices), len(books.days)) == ([NAME], 1, 1)
    assert len(rows(database, "local_day")) == 1


def test_a_day_is_opened_once(database: Database) -> None:
    """The first use names its budget; later uses find it with what it has out."""
    keep(database, lambda books: books.open_day(NAME, DAY, 999))
    keep(database, lambda books: books.open_day(NAME, "2026-12-02", 7))
    assert [(row["budget"], row["held"]) for row in rows(database, "local_day")] == [
        (60, 40),
        (7, 0),
    ]


def test_seq_is_gapless_and_time_does_not_go_back(database: Database) -> None:
    """A wall clock that was set back stamps the moment of the entry before."""
    pass_service_ms(database, 500)

    def twice(books: Books) -> None:
        books.post(NAME, NOTE)
        books.post(NAME, NOTE)

    for wall_ms in (70, 60, 80):
        keep(database, twice, wall_ms=wall_ms)
    written = rows(database, "stream")[2:]
    assert [row["seq"] for row in written] == [3, 4, 5, 6, 7, 8]
    assert [row["at_ms"] for row in written] == [70, 70, 70, 70, 80, 80]
    assert {row["service_ms"] for row in written} == {500}
    assert rows(database, "balance")[0]["seq"] == 8


@pytest.mark.parametrize(
    ("what", "movement"),
    [
        ("balance", Movement(spent=61)),
        ("balance", Movement(held=61)),
        ("day", Movement(day_spent=21)),
        ("day", Movement(held=21)),
        ("slice", Movement(remaining=-41)),
        ("slice", Movement(owed=-1)),
    ],
)
def test_a_guard_refuses_money_that_is_not_there(
    database: Database, what: str, movement: Movement
) -> None:
    """One nano too many, and of the whole transaction nothing is written."""
    before = everything(database)
    with pytest.raises(BrokenPromise, match=f"the guard of a {what} refused"):
        keep(database, lambda books: books.post(NAME, NOTE, movement, day=DAY, slice_id=ID))
    assert everything(database) == before


@pytest.mark.parametrize(
    ("movement", "left"),
    [
        (Movement(held=20), (0, 60, 60)),
        (Movement(spent=60), (60, 40, 40)),
        (Movement(day_spent=20), (0, 40, 40)),
        (Movement(held=-40, remaining=-40), (0, 0, 0)),
    ],
)
def test_a_guard_lets_the_last_nano_through(
    database: Database, movement: Movement, left: tuple[int, int, int]
) -> None:
    """What is there may be used up."""
    keep(database, lambda books: books.post(NAME, NOTE, movement, day=DAY, slice_id=ID))
    balance, day = rows(database, "balance")[0], rows(database, "local_day")[0]
    assert (balance["spent"], balance["held"], day["held"]) == left


def test_a_slice_in_another_state_than_was_read_is_not_written(database: Database) -> None:
    """Its guard names the state that the decision was made on."""

    def work(connection: Writing) -> None:
        books = Books(connection, [NAME], 1)
        books.load_slices([ID])
        connection.execute(text("UPDATE slice SET state = 'retired'"))
        books.replace_slice(books.slices[ID]._replace(state="closed"))
        books.save()

    with pytest.raises(BrokenPromise, match="the guard of a slice"):
        database.write(work)
    assert rows(database, "slice")[0]["state"] == "open"


def test_a_slot_that_is_filled_is_not_filled_again(database: Database) -> None:
    """The second entry of a slot is refused with everything beside it."""
    entry = Entry("won", {}, b"b" * 16, "result", 1)
    keep(database, lambda books: books.post(NAME, entry, Movement(spent=1)))
    before = everything(database)
    with pytest.raises(BrokenPromise, match="refused a row"):
        keep(database, lambda books: books.post(NAME, entry, Movement(spent=1)))
    assert everything(database) == before


def test_what_is_no_sum_is_replaced(database: Database) -> None:
    """State and rounds of a slice, and the bounds of a balance and of a day."""

    def edit(books: Books) -> None:
        books.replace_slice(books.slices[ID]._replace(state="retired", ticked=5, counted=4))
        books.replace_account(books.accounts[NAME]._replace(budget=90, target=80))
        books.replace_day(Day(NAME, DAY, 50, 45, 0, 40, 0))

    keep(database, edit)
    part, balance, day = (rows(database, t)[0] for t in ("slice", "balance", "local_day"))
    assert (part["state"], part["ticked"], part["counted"]) == ("retired", 5, 4)
    assert (balance["budget"], balance["target"]) == (90, 80)
    assert (day["budget"], day["target"]) == (50, 45)


def test_only_cost_of_this_transaction_is_newly_unfunded(database: Database) -> None:
    """What found no money before has had its freeze before."""
    for cost, newly in ((3, True), (0, False), (2, True)):
        late = Movement(unfunded=cost)
        books = keep(database, lambda books, late=late: books.post(NAME, NOTE, late))  # type: ignore[misc]
        assert books.newly_unfunded(NAME) is newly


def test_who_comes_second_waits_and_sees_what_the_first_wrote(database: Database) -> None:
    """The lock is taken before anything is read, so no decision rests on what was."""
    inside, leave = threading.Event(), threading.Event()

    def slowly(books: Books) -> None:
        inside.set()
        leave.wait(10)
        books.post(NAME, NOTE, Movement(spent=60))

    with ThreadPoolExecutor(2) as pool:
        first = pool.submit(keep, database, slowly)
        inside.wait(10)
        second = pool.submit(keep, database, lambda books: books.post(NAME, NOTE))
        with pytest.raises(TimeoutError):
            second.result(0.2)
        leave.set()
        assert first.result().accounts[NAME].seq == 3
        assert (second.result().accounts[NAME].seq, second.result().accounts[NAME].spent) == (4, 60)


def test_line_items_named_in_any_order_never_deadlock(database: Database) -> None:
    """Everybody locks in the order of ids, so not one transaction has to be repeated."""
    begin(database, id="orchard")
    runs = []

    def work(names: str) -> None:
        def both(books: Books) -> None:
            runs.append(names)
            for name in names.split():
                books.post(name, NOTE)

        keep(database, both, names)

    with ThreadPoolExecutor(6) as pool:
        list(pool.map(work, ["garden orchard", "orchard garden"] * 30))
    assert len(runs) == 60
    assert [row["seq"] for row in rows(database, "balance")] == [62, 61]
