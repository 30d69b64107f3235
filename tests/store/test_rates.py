"""Rates as rows: which of a pair counts at a moment, and which are still to come."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from service.store import rates
from service.store.database import Database


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def add(
    database: Database,
    from_ms: int,
    rate: int = 1,
    until_ms: int | None = None,
    pair: tuple[str, str] = ("USD", "EUR"),
) -> int:
    """Post one rate."""
    return database.write(
        lambda c: rates.add(
            c, currency=pair[0], into=pair[1], rate=rate, from_ms=from_ms, until_ms=until_ms,
            wall_ms=7, actor="tester", reason="a try",
        )
    )  # fmt: skip


def numbers(database: Database, at_ms: int) -> list[int]:
    """Which rates are current at a moment, by number."""
    return [row["number"] for row in database.read(lambda c: rates.current(c, at_ms))]


def test_a_rate_is_read_as_it_was_posted(database: Database) -> None:
    """With who posted it, why and when; nothing is there before the first."""
    assert numbers(database, 5) == []
    number = add(database, 10, 930_000_000, 99)
    assert database.read(lambda c: rates.current(c, 5)) == [
        {
            **{"number": number, "currency": "USD", "into": "EUR", "rate": 930_000_000},
            **{"from_ms": 10, "until_ms": 99, "set_ms": 7, "actor": "tester", "reason": "a try"},
        }
    ]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("at_ms", "current"),
    [(5, [1, 2, 3]), (10, [1, 2, 3]), (19, [1, 2, 3]), (20, [2, 3]), (30, [3])],
)
def test_a_rate_counts_until_another_has_begun(
    database: Database, at_ms: int, current: list[int]
) -> None:
    """What is still to come is shown beside it; the moment of its beginning is its own."""
    for from_ms in (10, 20, 30):
        add(database, from_ms)
    assert numbers(database, at_ms) == current


def test_of_two_from_one_moment_the_later_posted_counts(database: Database) -> None:
    """A mistake is mended by posting again."""
    add(database, 10, 1)
    add(database, 10, 2)
    assert numbers(database, 10) == [2]
    assert numbers(database, 9) == [1, 2]


def test_a_rate_that_begins_earlier_does_not_follow_a_later_one(database: Database) -> None:
    """Posted afterwards, it is history at once."""
    add(database, 20)
    add(database, 10)
    assert numbers(database, 25) == [1]
    assert numbers(database, 15) == [2, 1]


def test_pairs_have_nothing_to_do_with_each_other(database: Database) -> None:
    """Nor has a pair with its own reverse; they come in order of their names."""
    for pair in (("USD", "EUR"), ("EUR", "USD"), ("USD", "CHF")):
        add(database, 10, pair=pair)
    found = database.read(lambda c: rates.current(c, 50))
    assert [(row["currency"], row["into"]) for row in found] == [
        ("EUR", "USD"), ("USD", "CHF"), ("USD", "EUR"),
    ]  # fmt: skip


def test_one_that_has_ended_is_shown_until_it_is_followed(database: Database) -> None:
    """So that whoever asks sees that it ran out, and since when."""
    add(database, 10, until_ms=20)
    assert numbers(database, 30) == [1]
    add(database, 40)
    assert numbers(database, 39) == [1, 2]
    assert numbers(database, 40) == [2]
