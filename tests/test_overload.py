"""Too much at once, or a database that hangs: bids are passed at once, outcomes come again."""

from __future__ import annotations

import asyncio
import threading
import time

import pytest

from service.bidding import Bidder, Clocks
from service.decision.opportunity import Opportunity
from service.errors import Overloaded, StoreAway
from service.feedback import Report, Room
from service.guard.ticket import TicketKeys
from service.pulse import Pulse
from service.threads import Threads
from tests.builders import NAME, PRICE, Worker, working
from tests.databases import PostgreSQL

pytestmark = pytest.mark.anyio

on_postgresql = pytest.mark.parametrize("backend", ["postgresql"], indirect=True)


class Busy:
    """All threads of a worker, kept busy until the end of the block."""

    def __init__(self, threads: Threads, count: int) -> None:
        self._threads, self._count, self._over = threads, count, threading.Event()

    async def __aenter__(self) -> None:
        tasks = [self._threads.run(self._over.wait, 20) for _ in range(self._count)]
        self._tasks = [asyncio.create_task(task) for task in tasks]
        await asyncio.sleep(0.05)

    async def __aexit__(self, *_: object) -> None:
        self._over.set()
        await asyncio.gather(*self._tasks)


async def test_one_more_than_may_wait_is_passed_at_once(migrated_url: str) -> None:
    """Those within the limit get their price when the slice comes, and a full hand never waits."""
    async with working(migrated_url, waiting_max=3) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bid(name, test=True)
        await worker.bid("meadow")
        async with Busy(worker.threads, 6):
            waiting = [asyncio.create_task(worker.bid()) for _ in range(3)]
            await asyncio.sleep(0.05)
            began = time.monotonic()
            assert {(await worker.bid()).reason for _ in range(50)} == {"overloaded"}
            assert (await worker.bid("meadow")).bid == PRICE
            assert (await worker.bid("forest")).reason == "overloaded"
            assert time.monotonic() - began < 1.0
        assert [answer.bid for answer in await asyncio.gather(*waiting)] == [PRICE] * 3
        assert (await worker.bid()).bid == PRICE


async def test_a_first_look_ends_at_the_deadline(migrated_url: str) -> None:
    """Nobody waits for the database longer than the caller waits for us; the look goes on."""
    async with working(migrated_url) as worker, working(migrated_url, "two") as two:
        await worker.create()
        async with Busy(two.threads, 6):
            began = time.monotonic()
            answer = await two.bid(deadline_ms=50)
            assert (answer.reason, time.monotonic() - began < 2) == ("past_deadline", True)
        async with asyncio.timeout(5):
            while two.catalog.get(NAME) is None:
                await asyncio.sleep(0.01)


def bidder_with(worker: Worker, lag_s: float) -> Bidder:
    """The worker's bidder on a loop that is so late."""
    clocks = Clocks(100, 5000, lag_s=lambda: lag_s)
    keys = TicketKeys([b"k" * 32])
    return Bidder(
        worker.catalog, worker.leasing, keys, bytes(16), clocks, worker.backlog, b"invented"
    )


async def test_who_was_seen_too_late_is_passed(migrated_url: str) -> None:
    """On a loop later than the deadline a price would come too late, and hold money for nothing."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        wish, now = Opportunity(NAME, deadline_ms=100), time.monotonic()
        assert (await bidder_with(worker, 0.2).bid(wish, now)).reason == "overloaded"
        assert worker.leasing.hand.slices[NAME].bids == 1
        assert (await bidder_with(worker, 0.0).bid(wish, time.monotonic())).bid == PRICE


async def test_the_pulse_sees_a_loop_that_is_held_up() -> None:
    """Whoever looks right after the hold-up sees it, and soon after it is forgotten."""
    pulse = Pulse()
    assert pulse.lag_s() == 0.0
    beating = asyncio.create_task(pulse.run())
    await asyncio.sleep(0.05)
    threading.Event().wait(0.3)  # The loop stands still.
    assert pulse.lag_s() > 0.2
    await asyncio.sleep(0)
    assert pulse.lag_s() > 0.2
    async with asyncio.timeout(5):
        while pulse.lag_s() > 0.05:
            await asyncio.sleep(0.02)
    beating.cancel()


async def test_no_room_is_told_before_anything_is_read(migrated_url: str) -> None:
    """One call too many, or too many rows in the queue; what was admitted is booked."""
    async with working(migrated_url, room=Room(2, 3)) as worker:
        await worker.create()
        tickets = [answer.ticket for answer in await worker.bids(3)]
        admitted = worker.feedback.admitted
        with admitted(), admitted(), pytest.raises(Overloaded), admitted():
            raise AssertionError("a third was let in")
        reports = [Report("lost", ticket) for ticket in tickets]
        task = asyncio.create_task(worker.report(*reports))
        await asyncio.sleep(0)
        await asyncio.sleep(0)
        with pytest.raises(Overloaded), admitted():
            raise AssertionError("the queue is full")
        assert [receipt.status for receipt in await task] == ["recorded"] * 3
        with admitted():
            assert {r.status for r in await worker.report(*reports)} == {"duplicate"}


async def test_outcomes_wait_a_moment_for_a_connection(migrated_url: str) -> None:
    """A quarter of a second, then the caller is told; nothing of it was done, or will be."""
    async with working(migrated_url) as worker:
        await worker.create()
        (answer,) = await worker.bids(1)
        async with Busy(worker.threads, 6):
            began = time.monotonic()
            with pytest.raises(Overloaded):
                await worker.report(Report("lost", answer.ticket))
            assert 0.2 < time.monotonic() - began < 1.0
            assert (await worker.bid()).bid == PRICE
        await asyncio.sleep(0.1)
        assert worker.one("SELECT count(*) FROM stream WHERE kind = 'lost'") == 0
        (receipt,) = await worker.report(Report("lost", answer.ticket))
        assert receipt.status == "recorded"


@on_postgresql
async def test_outcomes_behind_a_hanging_database_are_answered(
    migrated_url: str, postgresql: PostgreSQL, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Perhaps recorded, says the answer; what still waits keeps its room, and the repeat counts."""
    monkeypatch.setattr("service.feedback.ANSWER_S", 0.5)
    async with working(migrated_url, room=Room(10, 2)) as worker:
        await worker.create()
        tickets = [answer.ticket for answer in await worker.bids(2)]
        with postgresql.hanging():
            told = [worker.report(Report("lost", ticket)) for ticket in tickets]
            answers = await asyncio.gather(*told, return_exceptions=True)
            assert {type(answer) for answer in answers} == {StoreAway}
            with pytest.raises(Overloaded), worker.feedback.admitted():
                raise AssertionError("rows that wait were forgotten")
        monkeypatch.undo()
        for ticket in tickets:
            (receipt,) = await worker.report(Report("lost", ticket))
            assert receipt.status in ("recorded", "duplicate")
        assert worker.one("SELECT count(*) FROM stream WHERE kind = 'lost'") == 2
        with worker.feedback.admitted():
            assert worker.audit() == []


@on_postgresql
async def test_a_hanging_database_holds_up_no_bid(
    migrated_url: str, postgresql: PostgreSQL
) -> None:
    """Prices leave from the hand; who needs a slice waits once for a moment, then not at all."""
    async with working(migrated_url) as worker:
        await worker.create(bid_cap=PRICE)
        await worker.bids(1)
        with postgresql.hanging():
            first = [await worker.bid(deadline_ms=300) for _ in range(15)]
            began = time.monotonic()
            waited = [await worker.bid(deadline_ms=300) for _ in range(200)]
            took_s = time.monotonic() - began
        assert [answer.bid for answer in first] == [PRICE] * 15
        assert {answer.bid for answer in waited} == {None}
        assert took_s < 1.5
        async with asyncio.timeout(10):
            while (await worker.bid()).bid is None:
                await asyncio.sleep(0.02)
        assert worker.audit() == []
