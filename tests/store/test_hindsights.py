"""The decision log joined with the stream: pages, moments found by halves, and what is believed."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.ledger.entries import Entry
from service.store import decisions, hindsights
from service.store.database import Database
from service.store.hindsights import Page, Said, Span
from tests.builders import NAME, append, begin, line_item, valued
from tests.store.test_past_decisions import decided, outcome

ALWAYS = Span(0, 2**60)
HOUR_MS = 3_600_000


class Wall:
    """A wall clock that a test moves."""

    ms = 5_000_000

    def __call__(self) -> int:
        return self.ms


@pytest.fixture(name="wall")
def _wall() -> Wall:
    return Wall()


@pytest.fixture(name="database")
def _database(migrated_url: str, wall: Wall) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=wall)
    begin(database)
    yield database
    database.close()


def page(database: Database, after: int = 0, span: Span = ALWAYS) -> Page:
    """The next decisions after a number."""
    return database.read(lambda c: hindsights.page(c, line_item(), after, span))


def said(database: Database) -> list[Said]:
    """What is said of each decision."""
    return [line.said for line in page(database).lines]


def move_service(database: Database, milliseconds: int) -> None:
    """Let service time pass."""
    later = text("UPDATE service_clock SET now_ms = now_ms + :ms")
    database.write(lambda c: c.execute(later, {"ms": milliseconds}))


def test_an_empty_log_is_one_empty_page(database: Database) -> None:
    """And its first number is before every number."""
    assert page(database) == Page([], 0, None, 0)
    assert database.read(lambda c: hindsights.first_number(c, 5)) <= 0


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("entries", "wanted"),
    [
        ([], Said()),
        ([outcome("lost", 1, None)], ("lost", 0, 0, False, ())),
        ([outcome("won", 1)], ("won", 600, 0, False, ())),
        ([outcome("won", 1, 1500)], ("won", 1000, 0, False, ())),
        ([outcome("won", 1), valued(1, 70)], ("won", 600, 70, True, ())),
        ([outcome("won", 1), valued(1, 0)], ("won", 600, 0, True, ())),
        ([outcome("won", 1), valued(1, 70), valued(1, 30, "b", was=70)],
         ("won", 600, 30, True, ())),
    ],
)  # fmt: skip
def test_what_the_stream_says_of_a_bid(
    database: Database, entries: list[Entry], wanted: Any
) -> None:
    """Result, price up to the bid, and value with its corrections."""
    decisions.log(database, [decided(1, 1000)])
    append(database, *entries)
    (found,) = said(database)
    told = found.result, found.price, found.amount, found.valued, found.notes
    assert (found if wanted == Said() else told) == wanted


def test_two_words_of_one_auction_are_contradicted(database: Database) -> None:
    """Whichever is wrong, it is as if nothing were known, and that is counted."""
    decisions.log(database, [decided(1, 1000)])
    bid = (1).to_bytes(16)
    clash = Entry("conflict", {"said": "lost"}, bid, "conflict:x")
    append(database, outcome("won", 1), clash)
    (found,) = said(database)
    assert (found.result, found.notes) == ("silent", ("contradicted",))


def test_a_void_after_a_win_is_a_void(database: Database) -> None:
    """Where only billing pays, a win may turn out to have shown nothing."""
    decisions.log(database, [decided(1, 1000)])
    append(database, outcome("won", 1), Entry("void", {}, (1).to_bytes(16), "void"))
    assert [one.result for one in said(database)] == ["void"]


@pytest.mark.parametrize(
    ("late_ms", "amount", "notes"), [(60_000, 70, ()), (60_001, 0, ("late_values",))]
)
def test_a_value_counts_within_its_window(
    database: Database, late_ms: int, amount: int, notes: tuple[str, ...]
) -> None:
    """In service time from the win on, the last millisecond included."""
    decisions.log(database, [decided(1, 1000)])
    append(database, outcome("won", 1))
    move_service(database, late_ms)
    append(database, valued(1, 70))
    assert [(one.amount, one.notes) for one in said(database)] == [(amount, notes)]


def test_a_span_has_its_beginning_and_not_its_end(database: Database) -> None:
    """Tests in it are counted and left out; a pass has nothing said of it."""
    rows = [decided(n, 1000 * n) for n in (1, 2, 3)]
    passed = decided(None, 1500)
    decisions.log(database, [*rows, passed, decided(4, 1600, test=1), decided(5, 5000, test=1)])
    found = page(database, span=Span(1000, 3000))
    assert [line.decision["at_ms"] for line in found.lines] == [1000, 2000, 1500]
    assert (found.tests, found.end, found.lines[2].said) == (1, None, Said())


def test_a_day_is_that_of_the_line_item(database: Database) -> None:
    """In Zurich the first of January 1970 ends at 23:00 UTC."""
    decisions.log(database, [decided(1, 23 * HOUR_MS - 1), decided(2, 23 * HOUR_MS)])
    assert [line.day for line in page(database).lines] == ["1970-01-01", "1970-01-02"]


def test_pages_go_on_from_a_number(database: Database, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whole in order, other line items left out, and None at the end."""
    monkeypatch.setattr(hindsights, "PAGE_ROWS", 2)
    rows = [decided(n, n) for n in range(1, 6)]
    decisions.log(database, [row for one in rows for row in (one, {**one, "line_item": "b"})])
    seen, after = list[int](), 0
    while True:
        found = page(database, after)
        seen += [line.decision["at_ms"] for line in found.lines]
        if found.end is None:
            break
        after = found.end
    assert seen == [1, 2, 3, 4, 5]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("from_ms", "number"), [(0, 0), (60_000, 0), (60_001, 1), (61_000, 1), (10**9, 4)]
)
def test_the_first_decision_of_a_moment_is_found_by_halves(
    database: Database, from_ms: int, number: int
) -> None:
    """With a minute of slack, since workers log in batches; one was pruned in between."""
    decisions.log(database, [decided(n, 1000 * at) for n, at in ((1, 0), (2, 1), (3, 2), (4, 90))])
    database.write(lambda c: c.execute(text("DELETE FROM decision WHERE number = 3")))
    assert database.read(lambda c: hindsights.first_number(c, from_ms)) == number


def test_what_was_spent_before_a_moment_leaves_the_rest_out(database: Database, wall: Wall) -> None:
    """Refunds are taken off, stamps may be equal, and it is never less than nothing."""
    for at_ms, entry in ((10, 500), (20, 300), (20, 200)):
        wall.ms = 10_000_000 + at_ms
        append(database, Entry("billed", {}, entry.to_bytes(16), "billed", entry))
    wall.ms = 10_000_030
    append(database, Entry("reversal", {}, None, None, 100))
    database.write(lambda c: c.execute(text("UPDATE balance SET spent = 900")))

    def before(at_ms: int) -> int:
        return database.read(lambda c: hindsights.spent_before(c, NAME, 10_000_000 + at_ms))

    assert [before(at_ms) for at_ms in (0, 10, 11, 20, 21, 30, 31)] == [
        0, 0, 500, 500, 1000, 1000, 900
    ]  # fmt: skip
    database.write(lambda c: c.execute(text("UPDATE balance SET spent = 100")))
    assert before(0) == 0


def test_recent_outcomes_are_the_newest_and_bounded(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Newest first, results only."""
    assert database.read(lambda c: hindsights.recent_outcomes(c, NAME)) == []
    append(database, outcome("won", 1), valued(1, 5), outcome("lost", 2), outcome("won", 3))
    monkeypatch.setattr(hindsights, "RECENT", 2)
    found = database.read(lambda c: hindsights.recent_outcomes(c, NAME))
    assert [kind for kind, _ in found] == ["won", "lost"]
    assert found[0][1]["bid"] == 1000
