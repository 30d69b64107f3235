"""The money in a worker's hand: leased before it is needed, never extended, given back once."""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Callable
from typing import TypeVar

import pytest
from sqlalchemy import event, text

from service import leasing
from service.errors import StoreAway
from service.leasing import DENIED_S, MARGIN_SHARE, STEP_S, Leasing
from service.store.database import Database, Writing
from service.threads import Threads
from tests.builders import CAP, LEASE_S, NAME, PRICE, Worker, begin, outage, working

pytestmark = pytest.mark.anyio

T = TypeVar("T")
FIRST = 16 * CAP


def held(worker: Worker) -> int:
    """What the database holds for the line item."""
    return worker.balance()["held"]


async def lease(worker: Worker) -> int:
    """Ask for one more slice; returns what the hand then holds."""
    await worker.leasing.obtain(NAME, 5)
    return worker.leasing.hand.slices[NAME].amount


def losing_answers(worker: Worker) -> Callable[[], None]:
    """Let every write happen while its answer is lost, until the returned call."""
    write = worker.database.write

    def lose(work: Callable[[Writing], T]) -> T:
        write(work)
        raise StoreAway("the answer was lost")

    def mend() -> None:
        worker.database.write = write  # type: ignore[method-assign]

    worker.database.write = lose  # type: ignore[method-assign]
    return mend


async def test_a_slice_is_replaced_and_never_extended(migrated_url: str) -> None:
    """Each next is at most double, and what the old one never issued comes free."""
    async with working(migrated_url) as worker:
        await worker.create()
        assert await lease(worker) == FIRST
        first = worker.leasing.hand.slices[NAME]
        first.take(PRICE)
        # A worker that is busy asks for more, and never gets more than double.
        first.take(FIRST - CAP)
        worker.clock.now += 1
        second = await lease(worker)
        assert FIRST < second <= 2 * FIRST
        assert worker.leasing.hand.slices[NAME].id != first.id
        assert held(worker) == FIRST + second
        await worker.leasing.give_back()
        assert held(worker) == PRICE + FIRST - CAP + second
        assert worker.audit() == []


async def test_the_next_slice_is_asked_for_at_half(migrated_url: str) -> None:
    """By money or by time, whichever comes first; nobody waits for it."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        first = worker.leasing.hand.slices[NAME]
        worker.leasing.refresh(first)
        await settled(worker)
        assert worker.leasing.hand.slices[NAME] is first
        worker.clock.now += (LEASE_S * (1 - 1 / MARGIN_SHARE) - STEP_S) / 2
        worker.leasing.refresh(first)
        await settled(worker)
        second = worker.leasing.hand.slices[NAME]
        assert second is not first
        second.take(second.amount // 2)
        worker.leasing.refresh(second)
        await settled(worker)
        assert worker.leasing.hand.slices[NAME] is not second


async def settled(worker: Worker) -> None:
    """Wait until no wish is open: one more for another line item is answered in its turn."""
    await worker.leasing.obtain("nobody", 5)
    await worker.leasing.obtain("nobody", 5)


async def test_a_slice_ends_here_before_it_ends_there(migrated_url: str) -> None:
    """Its time is measured from before we asked, less a margin, on a clock that never steps."""
    async with working(migrated_url) as worker:
        await worker.create()
        await lease(worker)
        slice_ = worker.leasing.hand.slices[NAME]
        assert slice_.leased_at == worker.clock.now
        assert slice_.expires_at - slice_.leased_at == pytest.approx(LEASE_S * 0.95 - STEP_S)
        worker.clock.now = slice_.expires_at
        assert worker.leasing.hand.usable(NAME, worker.clock.now) is None


async def test_no_money_is_asked_for_once_a_moment(migrated_url: str) -> None:
    """A denial stands for a moment, and a change of the line item ends it."""
    async with working(migrated_url) as worker:
        await worker.create(budget=PRICE)
        await worker.bids(1)
        assert (await worker.bid()).reason == "budget_held"
        assert worker.leasing.denied(NAME) == "budget_held"
        worker.clock.now += DENIED_S
        assert worker.leasing.denied(NAME) is None
        await worker.bid()
        await worker.operator.patch(NAME, {"budget": 9 * PRICE}, 1, None, None, "tester")
        await worker.upkeep.follow()
        assert worker.leasing.denied(NAME) is None
        assert (await worker.bid()).bid == PRICE


async def test_at_the_tail_the_rest_in_the_hand_is_kept(migrated_url: str) -> None:
    """A new slice of less than one bid goes back when the hand holds more."""
    async with working(migrated_url) as worker:
        await worker.create(budget=FIRST)
        first = await lease(worker)
        tail = CAP // 2
        await worker.operator.patch(NAME, {"budget": first + tail}, 1, None, None, "tester")
        kept = worker.leasing.hand.slices[NAME]
        assert await lease(worker) == kept.amount
        assert (held(worker), worker.leasing.denied(NAME)) == (first + tail, "budget_held")
        await worker.leasing.give_back()
        assert held(worker) == first
        assert worker.audit() == []


async def test_a_slow_worker_changes_to_a_smaller_slice(migrated_url: str) -> None:
    """What it will not need until the next refresh is free for others."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        worker.clock.now += LEASE_S / 2
        await worker.bids(1)
        await settled(worker)
        assert worker.leasing.hand.slices[NAME].amount == CAP
        await worker.leasing.give_back()
        assert held(worker) == 2 * PRICE + CAP


async def test_many_line_items_share_a_transaction(migrated_url: str) -> None:
    """Wishes that wait together are answered together; an unknown one spoils none."""
    async with working(migrated_url) as worker:
        names = [f"bed-{number}" for number in range(12)]
        for name in names:
            await worker.create(id=name)
        seen = worker.one("SELECT count(*) FROM stream")
        await asyncio.gather(*(worker.leasing.obtain(n, 5) for n in [*names, "nobody"]))
        assert set(worker.leasing.hand.slices) == set(names)
        assert worker.one("SELECT count(*) FROM stream") == seen + 12
        assert worker.one("SELECT count(DISTINCT service_ms) FROM stream WHERE kind='lease'") == 1


async def test_a_lease_whose_answer_was_lost_goes_back(migrated_url: str) -> None:
    """It was held, nobody bids from it, and it comes free without waiting for its grace."""
    async with working(migrated_url) as worker:
        await worker.create()
        mend = losing_answers(worker)
        assert (await worker.bid()).reason == "budget_held"
        mend()
        assert held(worker) == FIRST
        await worker.leasing.give_back()
        assert held(worker) == 0
        worker.clock.now += DENIED_S
        assert (await worker.bid()).bid == PRICE


async def test_giving_back_twice_frees_once(migrated_url: str) -> None:
    """An answer that was lost makes it tell again, and the second telling touches no row."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(2)
        worker.leasing.hand.retire_all()
        mend = losing_answers(worker)
        await worker.leasing.give_back()
        assert len(worker.leasing.hand.given) == 1
        mend()
        await worker.leasing.give_back()
        assert (held(worker), worker.leasing.hand.given) == (2 * PRICE, [])
        assert worker.one("SELECT count(*) FROM stream WHERE kind = 'retire'") == 1
        assert worker.audit() == []


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_an_outage_is_ridden_out_on_the_slice_in_hand(migrated_url: str) -> None:
    """Prices leave while there is money in the hand, then pass, and come back by themselves."""
    async with working(migrated_url) as worker:
        await worker.create(bid_cap=PRICE)
        await worker.bids(1)
        with outage(migrated_url):
            answers = [await worker.bid() for _ in range(16)]
            assert [a.bid for a in answers[:15]] == [PRICE] * 15
            assert answers[15].reason == "budget_held"
        worker.clock.now += 1
        assert (await worker.bid()).bid == PRICE


async def test_a_stop_in_the_middle_of_a_lease_strands_nothing(migrated_url: str) -> None:
    """The slice that nobody waited for any more is given back with the others."""
    database = Database(migrated_url)
    begin(database, policy={"method": "flat", "price": PRICE})
    threads = Threads(2)
    leasing = Leasing(database, threads, "one", LEASE_S)
    go, reached = threading.Event(), threading.Event()

    def wait(_connection: object) -> None:
        reached.set()
        go.wait(5)

    event.listen(database.engine, "commit", wait)
    leasing.wish(NAME)
    running = asyncio.create_task(leasing.run())
    assert await asyncio.to_thread(reached.wait, 5)
    running.cancel()
    go.set()
    await asyncio.gather(running, return_exceptions=True)
    held = text("SELECT held FROM balance")
    assert database.read(lambda c: c.execute(held).scalar_one()) > 0
    await leasing.give_back()
    assert database.read(lambda c: c.execute(held).scalar_one()) == 0
    threads.close()
    database.close()


async def test_every_line_item_has_its_turn_to_report(migrated_url: str) -> None:
    """In so many parts as turns each slice and each pass is told of once."""
    async with working(migrated_url) as worker:
        names = [f"meadow-{number}" for number in range(12)]
        for name in names:
            await worker.create(id=name)
            await worker.bid(name)
            await worker.bid(name, floor=PRICE + 1)
        told, ticks = "SELECT count(*) FROM stream WHERE kind = 'tick'", list[int]()
        for _ in range(4):
            await worker.leasing.tick(parts=4)
            ticks.append(worker.one(told))
        assert ticks[-1] == len(names)
        # Names are hashed anew in each process; that all twelve share one part is no chance.
        assert ticks[0] < len(names)
        assert worker.leasing.hand.under_floor == {}


async def test_many_slices_are_given_back_in_pieces(
    migrated_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each piece is a transaction; after a failure what was not told waits, in order."""
    async with working(migrated_url) as worker:
        monkeypatch.setattr(leasing, "TOLD_MAX", 2)
        names = [f"meadow-{number}" for number in range(5)]
        for name in names:
            await worker.create(id=name)
            await worker.bid(name)
        worker.leasing.hand.retire_all()
        mend = losing_answers(worker)
        await worker.leasing.give_back()
        mend()
        assert [one.line_item for one in worker.leasing.hand.given] == names
        await worker.leasing.give_back()
        assert worker.leasing.hand.given == []
        assert worker.one("SELECT count(*) FROM slice WHERE state = 'retired'") == 5


async def test_a_refresh_waits_for_company_and_a_bid_for_nobody(migrated_url: str) -> None:
    """What is only to follow a slice is leased with what somebody waits for, in one transaction."""
    async with working(migrated_url) as worker:
        for name in ("meadow", "orchard"):
            await worker.create(id=name)
        slow = Leasing(worker.database, worker.threads, "one", LEASE_S, worker.clock, gather_s=30.0)
        running = asyncio.create_task(slow.run())
        first = slow.wish("meadow")
        await asyncio.sleep(0.05)
        assert not first.done()
        await slow.obtain("orchard", 5)
        assert set(slow.hand.slices) == {"meadow", "orchard"}
        running.cancel()
        await asyncio.gather(running, return_exceptions=True)
