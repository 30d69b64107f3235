"""What charts are drawn of: every row where there are few, steps of a clock where many."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from service.store import decisions, watching_series
from service.store.database import Database
from service.store.watching_series import DECISIONS_MAX, ENTRIES_MAX, Series
from tests.builders import NAME, append, begin, won
from tests.store.test_watching import HOUR_MS, NOW_MS, decided

DAY = "2025-12-01"


@pytest.fixture
def database(migrated_url: str) -> Iterator[Database]:
    """A migrated database with one line item whose clock stands still."""
    opened = Database(migrated_url, wall_ms=lambda: NOW_MS)
    begin(opened)
    yield opened
    opened.close()


def read(database: Database, ago_ms: int = HOUR_MS) -> Series:
    """What has happened in the last hour."""
    return database.read(lambda c: watching_series.series(c, NAME, NOW_MS - ago_ms, NOW_MS, DAY))


def test_few_rows_come_one_by_one_oldest_first(database: Database) -> None:
    """Bids and wins each with their price; what lies before the moment is left out."""
    rows = [decided(NAME, 2 * HOUR_MS), decided(NAME, 2000, set_by="cap", price=8_000_000)]
    decisions.log(database, [*rows, decided(NAME, 1000)])
    append(database, won(1, 700_000), won(2, 600_000))
    found = read(database)
    assert found.bids == [(NOW_MS - 2000, 8_000_000), (NOW_MS - 1000, 1_000_000)]
    assert (found.bids_counted, found.capped, found.step_ms) == (2, 1, None)
    assert found.clearing == [(NOW_MS, 700_000), (NOW_MS, 600_000)]
    assert found.wins_counted == 2


def test_many_decisions_come_as_medians_of_steps(database: Database) -> None:
    """Beyond the bound nothing is left out: counts are exact, prices within nine per cent."""
    count = DECISIONS_MAX + 10
    decisions.log(database, [decided(NAME, 1000 + n % 1000) for n in range(count)])
    found = read(database)
    assert found.step_ms == 300_000
    assert found.bids_counted == count
    assert [abs(price - 1_000_000) <= 90_000 for _, price in found.bids] == [True] * len(found.bids)
    assert len(found.bids) <= 2


def test_no_more_rows_are_read_than_the_bound(database: Database) -> None:
    """The bounds are what keeps the page quick on a busy line item."""
    assert max(ENTRIES_MAX, DECISIONS_MAX) <= 10_000
    assert read(database).bids == []


def test_checkpoints_and_moments_are_those_of_the_stream(database: Database) -> None:
    """A seq has the moment of its entry; without checkpoints there are none."""
    seq = append(database, won(1))
    assert database.read(lambda c: watching_series.checkpoints(c, NAME)) == []
    assert database.read(lambda c: watching_series.moments(c, NAME, [seq])) == [NOW_MS]
