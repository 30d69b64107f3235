"""Named reads for people: all of one line item at one moment, and nothing of another."""

from __future__ import annotations

import asyncio

import pytest

from service.errors import NotFound
from service.feedback import Report
from service.ledger.days import local_day
from service.store.reading import Facts, facts, last_expiry_ms
from tests.builders import CAP, LEASE_S, NAME, PRICE, UNIT, Worker, begin, working

pytestmark = pytest.mark.anyio

OTHER = "meadow"


def read(worker: Worker, name: str = NAME) -> Facts:
    """The facts of a line item."""
    return worker.database.read(lambda connection: facts(connection, name))


def expiry_ms(worker: Worker, name: str | None = NAME) -> int:
    """How long from now the last open slice lasts."""
    seen = worker.one("SELECT seen_ms FROM service_clock")
    return worker.database.write(lambda connection: last_expiry_ms(connection, name)) - int(seen)


async def test_what_has_just_begun_has_facts(migrated_url: str) -> None:
    """Nothing is missing before the first bid; an unknown id is not found."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        found = read(worker)
        assert (found.row.id, found.balance["budget"], found.balance["held"]) == (NAME, UNIT, 0)
        assert (found.day, found.slices, found.feed, found.passes) == (None, [], {}, {})
        assert (found.snapshot.seq, found.learner_seq, found.quarantined) == (0, 0, 0)
        with pytest.raises(NotFound):
            read(worker, OTHER)


async def test_nothing_of_another_line_item_is_counted(migrated_url: str) -> None:
    """Slices, feed, passes and quarantine are each of the one that was asked for."""
    async with working(migrated_url) as worker:
        for name in (NAME, OTHER):
            begin(worker.database, id=name)
        (answer,) = await worker.bids(1)
        await worker.bid(floor=CAP)
        await worker.report(Report("won", answer.ticket, clearing=PRICE))
        worker.run(
            "INSERT INTO quarantine (at_ms, line_item, error, body) VALUES (1, :id, '', '')",
            id=NAME,
        )
        await worker.upkeep.log()
        mine, other = read(worker), read(worker, OTHER)
        assert [(s["state"], s["slices"]) for s in mine.slices] == [("open", 1)]
        assert mine.slices[0]["remaining"] == mine.balance["held"]
        assert (list(mine.feed), mine.passes, mine.quarantined) == (["won"], {"under_floor": 1}, 1)
        assert (other.slices, other.feed, other.passes, other.quarantined) == ([], {}, {}, 0)


async def test_slices_are_summed_by_state(migrated_url: str) -> None:
    """What is closed and holds nothing is not among them."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        await worker.bids(3)
        worker.leasing.hand.retire_all()
        await worker.leasing.give_back()
        await worker.bids(1)
        by_state = {row["state"]: row for row in read(worker).slices}
        assert by_state["retired"]["remaining"] == 3 * PRICE
        assert by_state["open"]["slices"] == 1
        await worker.stop()
        worker.pass_service_ms(10**9)
        await worker.keep_time()
        assert read(worker).slices == []


async def test_today_is_the_day_of_the_line_item(migrated_url: str) -> None:
    """By its own time zone; yesterday's row is not shown for today's."""
    async with working(migrated_url) as worker:
        begin(worker.database, flight={"time_zone": "Pacific/Auckland"}, daily_budget=UNIT)
        await worker.bids(1)
        found = read(worker)
        assert found.day is not None
        assert found.day["day"] == local_day(found.wall_ms, "Pacific/Auckland")
        worker.run("UPDATE local_day SET day = '2000-01-01'")
        assert read(worker).day is None


async def test_the_last_thousand_decisions_are_counted(migrated_url: str) -> None:
    """An old reason fades as new decisions come; bids and tests are no passes."""
    async with working(migrated_url, queue_max=2000) as worker:
        begin(worker.database)
        for _ in range(3):
            await worker.bid(floor=CAP)
        await worker.upkeep.log()
        worker.run("UPDATE decision SET reason = 'frozen'")
        for _ in range(998):
            await worker.bid(floor=CAP)
        await worker.bid(floor=CAP, test=True)
        await worker.upkeep.log()
        assert read(worker).passes == {"frozen": 2, "under_floor": 998}


async def test_the_feed_says_when_each_kind_came_last(migrated_url: str) -> None:
    """The newest entry of each kind, whatever came in between."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        one, two = await worker.bids(2)
        await worker.report(Report("lost", one.ticket))
        first = read(worker).feed["lost"]
        await asyncio.sleep(0.003)
        await worker.report(Report("lost", two.ticket))
        assert read(worker).feed["lost"] > first
        assert list(read(worker).feed) == ["lost"]


async def test_the_last_expiry_is_of_open_slices_alone(migrated_url: str) -> None:
    """Of one line item or of all; what is retired can price nothing any more."""
    async with working(migrated_url) as worker:
        for name in (NAME, OTHER):
            begin(worker.database, id=name)
        assert (expiry_ms(worker), expiry_ms(worker, None)) == (0, 0)
        await worker.bids(1)
        worker.pass_service_ms(5000)
        await worker.bids(1, OTHER)
        assert expiry_ms(worker) == LEASE_S * 1000 - 5000
        assert expiry_ms(worker, OTHER) == expiry_ms(worker, None) == LEASE_S * 1000
        await worker.stop()
        assert expiry_ms(worker, None) == 0
