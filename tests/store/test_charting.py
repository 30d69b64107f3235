"""Counts for charts: every decision and entry once, prices by bins, a bounded read."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from sqlalchemy import text

from service.ledger.entries import Entry
from service.store import charting, decisions
from service.store.charting import FIVE_MINUTES_MS, Bucket, Chart, Quantiles
from service.store.database import Database
from tests.builders import NAME, append, begin, valued, won
from tests.store.test_decisions import BID, PASS

DAY_MS = 86_400_000


class Wall:
    """A wall clock that a test moves."""

    ms = 10 * DAY_MS

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


def chart(database: Database, from_ms: int, until_ms: int, most: int = 300) -> Chart:
    """Read a chart of the garden."""
    return database.read(lambda c: charting.chart(c, NAME, from_ms, until_ms, most))


def told(price: int | None = None, at_ms: int = 0, **more: Any) -> dict[str, Any]:
    """A logged decision of the garden: a bid at a price, or a pass."""
    return {**(BID if price else PASS), "line_item": NAME, "at_ms": at_ms, "price": price, **more}


def test_decisions_are_counted_as_they_are_logged(database: Database) -> None:
    """Bids by what set them, passes by reason; tests and other line items count for nothing."""
    rows = [told(1000, 5), told(1000, 6, set_by="cap"), told(at_ms=7), told(5, 8, test=1)]
    decisions.log(database, [*rows, {**told(9), "line_item": "b"}])
    decisions.log(database, [told(at_ms=9, reason="under_floor"), told(at_ms=9)])
    [bucket] = chart(database, 0, FIVE_MINUTES_MS).buckets
    assert bucket.counts == {"bid": 2}
    assert bucket.set_by == {"value": 1, "cap": 1}
    assert bucket.passes == {"frozen": 2, "under_floor": 1}
    assert bucket.clearing is None


def test_entries_are_counted_once_by_however_many_clerks(database: Database, wall: Wall) -> None:
    """Costs, outcomes, values with their corrections and refunds, piece by piece."""
    append(database, won(1, 700), Entry("lost", {}, bytes(16), "result"), valued(1, 50))
    append(database, valued(1, 20, "b", was=50), Entry("reversal", {}, None, None, 300))
    database.write(lambda c: c.execute(text("UPDATE stream SET cost = 700 WHERE kind = 'won'")))
    piece = database.read(lambda c: c.execute(charting._ALL_BEHIND).all())
    assert chart(database, wall.ms, wall.ms + 1).behind == 6
    assert charting.roll(database, 4) == 4
    # A clerk that has slept since it looked counts the same piece again, in vain.
    assert charting.count(database, piece, 4) == 2
    assert [charting.roll(database) for _ in range(2)] == [2, 0]
    found = chart(database, wall.ms, wall.ms + 1)
    [bucket] = found.buckets
    assert (found.behind, bucket.cost, bucket.value) == (0, 400, 20)
    assert bucket.counts == {"won": 1, "lost": 1, "value": 1}


def test_quantiles_are_within_nine_percent(database: Database) -> None:
    """Of a thousand prices the tenth, the middle and the ninetieth of a hundred."""
    decisions.log(database, [told(1000 + 10 * n) for n in range(1001)])
    [bucket] = chart(database, 0, 1).buckets
    assert bucket.bids is not None
    assert bucket.bids.count == 1001
    for found, true in ((bucket.bids.low, 2000), (bucket.bids.median, 6000)):
        assert abs(found / true - 1) < 0.095
    assert abs(bucket.bids.high / 10_000 - 1) < 0.095


def test_a_price_of_nothing_has_a_bin_of_its_own(database: Database, wall: Wall) -> None:
    """Won for nothing is a clearing price of 0, not an error."""
    append(database, won(1, 0))
    charting.roll(database)
    [bucket] = chart(database, wall.ms, wall.ms + 1).buckets
    assert bucket.clearing == Quantiles(0, 0, 0, 1)


@pytest.mark.parametrize(
    ("span_ms", "step_ms"),
    [(1, 300_000), (DAY_MS, 300_000), (7 * DAY_MS, 3_600_000), (2000 * DAY_MS, 7 * DAY_MS)],
)
def test_a_chart_has_at_most_three_hundred_steps(
    database: Database, span_ms: int, step_ms: int
) -> None:
    """Steps are those of a clock, none is left out, and all of the span is covered."""
    found = chart(database, 12_345, 12_345 + span_ms)
    assert found.step_ms == step_ms
    assert len(found.buckets) <= charting.BUCKETS_MAX
    assert [b.at_ms for b in found.buckets[:2]] == [0, step_ms][: len(found.buckets)]
    assert found.buckets[-1].at_ms + step_ms >= 12_345 + span_ms


def test_steps_add_up_what_five_minutes_hold(database: Database) -> None:
    """A coarser chart tells the same sums."""
    decisions.log(database, [told(1000 + n, n * FIVE_MINUTES_MS) for n in range(40)])
    fine, coarse = chart(database, 0, DAY_MS), chart(database, 0, DAY_MS, 24)

    def bids(buckets: list[Bucket]) -> list[int]:
        return [bucket.counts.get("bid", 0) for bucket in buckets]

    assert bids(fine.buckets)[:41] == [1] * 40 + [0]
    assert sum(bids(coarse.buckets)) == 40
    assert coarse.step_ms == 2 * 3_600_000


def test_delays_are_told_by_doublings(database: Database, wall: Wall) -> None:
    """From a win to its first value, in service time; what was parked says nothing."""
    entry = valued(1, 5)
    late = Entry("value", {**entry.body, "won_ms": -5000}, entry.bid, entry.slot)
    parked = Entry("value", {**late.body, "parked": True}, bytes(16), "value:p")
    append(database, late, parked)
    charting.roll(database)
    rows = database.read(lambda c: charting.delays(c, NAME, 0, wall.ms + 1))
    assert rows == [(4096, 8192, 1)]


def test_a_damaged_entry_stops_no_chart(database: Database, wall: Wall) -> None:
    """The audit finds it; what can be read of it counts."""
    append(database, won(1, 700))
    database.write(lambda c: c.execute(text("UPDATE stream SET body = '{' WHERE kind = 'won'")))
    charting.roll(database)
    [bucket] = chart(database, wall.ms, wall.ms + 1).buckets
    assert bucket.counts == {"won": 1}


def test_old_counts_are_forgotten(database: Database, wall: Wall) -> None:
    """Only those before the moment."""
    append(database, won(1, 700))
    charting.roll(database)
    decisions.log(database, [told(1000, 5)])
    assert database.write(lambda c: charting.prune(c, wall.ms - 1)) == 2
    assert chart(database, 0, 1).buckets[0].counts == {}
    assert chart(database, wall.ms, wall.ms + 1).buckets[0].counts == {"won": 1}
