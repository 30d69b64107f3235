"""The third story over a real database: what happens in the background, called by hand."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

import pytest

from service.backlog import Backlog
from service.feedback import Report
from service.store import decisions
from service.store.database import Database
from service.upkeep import Rhythm, Upkeep
from tests.builders import GRACE_MS, LEASE_S, NAME, PRICE, Worker, outage, working

pytestmark = pytest.mark.anyio

MEAN = {"method": "mean"}
WORTH = 6_000_000
DAY_MS = 86_400_000


async def win(worker: Worker, count: int, value: int | None = None) -> None:
    """Win so many bids at their price, each with this value."""
    for number, answer in enumerate(await worker.bids(count)):
        reports = [Report("won", answer.ticket, clearing=answer.bid)]
        if value is not None:
            reports.append(Report("value", answer.ticket, value=value, event_id=f"e{number}"))
        assert {r.status for r in await worker.report(*reports)} == {"recorded"}


async def learner(worker: Worker) -> dict[str, int]:
    """What the state says of the learner."""
    return dict((await worker.operator.state(NAME))["learner"])


async def test_what_one_worker_teaches_others_take_up(migrated_url: str) -> None:
    """A snapshot is published once, and a follower bids from it without being told more."""
    async with working(migrated_url) as one, working(migrated_url, "two") as two:
        await one.create(policy=MEAN)
        before = await two.bid()
        await win(one, 4, WORTH)
        await one.clerk.teach()
        assert (await two.bid()).snapshot == before.snapshot == 0
        await two.upkeep.follow()
        after = await two.bid()
        assert (after.bid, after.snapshot) == (4_888_888, (await learner(one))["snapshot"])
        announced = "SELECT count(*) FROM change_log WHERE kind = 'snapshot'"
        assert one.one(announced) == 1
        await two.clerk.teach()
        assert one.one(announced) == 1


async def test_a_worker_says_how_far_it_has_read(migrated_url: str) -> None:
    """A look at the changes is written down at once, so that a freeze need not wait a beat."""
    async with working(migrated_url) as worker:
        await worker.create()
        seen = "SELECT change_seen FROM worker WHERE id = 'one'"
        assert worker.one(seen) == 0
        await worker.upkeep.follow()
        assert worker.one(seen) == worker.one("SELECT number FROM change_counter") == 1


async def test_silent_bids_count_as_rounds_once(migrated_url: str) -> None:
    """A tick reports what was priced; an outcome after it is no second round."""
    async with working(migrated_url) as worker:
        await worker.create()
        answers = await worker.bids(3)
        await worker.bid(floor=PRICE + 1)
        await worker.leasing.tick()
        await worker.leasing.tick()
        await worker.learn()
        assert (await learner(worker))["rounds"] == 4
        assert worker.one("SELECT count(*) FROM stream WHERE kind = 'tick'") == 1
        await worker.report(Report("lost", answers[0].ticket))
        await worker.learn()
        assert (await learner(worker))["rounds"] == 4


async def test_a_slice_whose_time_is_over_comes_back(migrated_url: str) -> None:
    """What was never issued is free again; what was keeps its hold through its grace."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(2)
        await worker.upkeep.give_back()
        assert worker.balance()["held"] > 2 * PRICE
        worker.clock.now += LEASE_S
        await worker.upkeep.give_back()
        assert worker.balance()["held"] == 2 * PRICE
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS)
        await worker.keep_time()
        assert worker.balance()["held"] == 0
        assert worker.audit() == []


async def test_time_moves_by_a_step_at_most(migrated_url: str) -> None:
    """After an outage of a day nothing has aged by a day."""
    async with working(migrated_url) as worker:
        worker.run("UPDATE service_clock SET seen_ms = seen_ms - :day", day=DAY_MS)
        before = worker.one("SELECT now_ms FROM service_clock")
        await worker.keep_time()
        assert worker.one("SELECT now_ms FROM service_clock") == before + 2000


async def test_cost_without_free_money_is_a_tripwire(migrated_url: str) -> None:
    """A late win that the budget cannot take freezes the line item in every hand."""
    async with working(migrated_url) as worker:
        await worker.create(budget=PRICE)
        await worker.upkeep.follow()
        (answer,) = await worker.bids(1)
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS)
        await worker.keep_time()
        worker.clock.now += LEASE_S
        assert (await worker.bid()).bid == PRICE
        (receipt,) = await worker.report(Report("won", answer.ticket, clearing=PRICE))
        assert (receipt.status, worker.balance()["unfunded"]) == ("late", PRICE)
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "frozen"
        assert worker.leasing.hand.slices == {}


async def test_a_stop_gives_everything_back(migrated_url: str) -> None:
    """Only open bids keep their hold, the log is whole, and the worker is off the list."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bids(3, name)
        await worker.stop()
        assert [worker.balance(name)["held"] for name in (NAME, "meadow")] == [3 * PRICE] * 2
        assert worker.column("SELECT id FROM worker") == []
        assert worker.one("SELECT count(*) FROM decision") == 6
        assert worker.audit() == []


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_an_outage_loses_no_slice_no_tick_and_no_log(migrated_url: str) -> None:
    """What could not be told is told when the database is back; a stop meanwhile is no error."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(2)
        await worker.bid(floor=PRICE + 1)
        with outage(migrated_url):
            await worker.leasing.tick()
            await worker.upkeep.stop()
        assert worker.leasing.hand.slices == {}
        await worker.upkeep.stop()
        assert worker.balance()["held"] == 2 * PRICE
        assert worker.one("SELECT count(*) FROM decision") == 3
        body = worker.one("SELECT body FROM stream WHERE kind = 'retire'")
        assert json.loads(body)["rounds"] + json.loads(body)["under_floor"] == 3


@asynccontextmanager
async def on_duty(worker: Worker) -> AsyncIterator[list[asyncio.Task[None]]]:
    """Every duty of a worker as the service runs it, until the end of the block."""
    tasks = [
        asyncio.create_task(duty) for duty in (*worker.upkeep.duties(), *worker.clerk.duties())
    ]
    try:
        yield tasks
    finally:
        for task in tasks:
            task.cancel()
        await asyncio.gather(*tasks, return_exceptions=True)


async def test_the_duties_run_by_themselves(migrated_url: str) -> None:
    """A win reaches the price within moments, without anybody calling."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await win(worker, 4, WORTH)
        async with on_duty(worker) as tasks, asyncio.timeout(5):
            while (await worker.bid()).snapshot == 0:
                await asyncio.sleep(0.02)
            assert [task for task in tasks if task.done()] == []


async def test_a_damaged_line_item_stops_no_other(migrated_url: str) -> None:
    """It is frozen and left as found; its neighbours bid, come free and survive a restart."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bids(1, name)
        worker.run("UPDATE balance SET held = 0 WHERE line_item = :id", id=NAME)
        worker.clock.now += LEASE_S
        await worker.upkeep.give_back()
        assert worker.balance("meadow")["held"] == PRICE
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS)
        async with on_duty(worker) as tasks, asyncio.timeout(5):
            while worker.balance("meadow")["held"]:
                await asyncio.sleep(0.02)
            assert [task for task in tasks if task.done()] == []
        assert worker.column("SELECT source || ' ' || line_item FROM freezing") == ["audit garden"]
    async with working(migrated_url, "two") as two:
        assert (await two.bid()).reason == "frozen"
        assert (await two.bid("meadow")).bid == PRICE
        open_ = "SELECT line_item FROM slice WHERE state = 'open' AND worker = 'one'"
        assert two.column(open_) == [NAME]


async def test_a_damaged_line_item_keeps_no_worker_from_starting(migrated_url: str) -> None:
    """What is due for closing there is found by the first step of a start."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        worker.run("UPDATE balance SET held = 0")
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS)
    async with working(migrated_url, "two") as two:
        assert (await two.bid()).reason == "frozen"


async def test_a_duty_ends_on_what_it_does_not_understand(migrated_url: str) -> None:
    """A worker in an unknown state must stop, not go on."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        worker.run("UPDATE line_item SET config = '{}'")
        async with on_duty(worker) as tasks:
            done, _ = await asyncio.wait(tasks, timeout=5, return_when=asyncio.FIRST_COMPLETED)
            assert "KeyError" in [type(task.exception()).__name__ for task in done]


async def test_the_clerks_bell_wakes_a_worker_before_its_poll(migrated_url: str) -> None:
    """On one host a snapshot is taken up a moment after it was published."""
    rings = [0]
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await win(worker, 4, WORTH)
        slow = Rhythm(change_poll_ms=60_000, tick_s=10, clock_step_ms_max=2000)
        upkeep = Upkeep(
            *(worker.database, worker.threads, "one", worker.catalog, worker.leasing),
            *(Backlog(10), asyncio.Event(), slow),
            bell=lambda: rings[0],
        )
        following = asyncio.create_task(upkeep._follow_changes())
        await asyncio.sleep(0.1)
        await worker.clerk.teach()
        before = (await worker.bid()).snapshot
        rings[0] += 1
        async with asyncio.timeout(10):
            while (await worker.bid()).snapshot == before:
                await asyncio.sleep(0.01)
        following.cancel()
        await asyncio.gather(following, return_exceptions=True)


async def test_nobody_waits_to_hear_of_a_snapshot(migrated_url: str) -> None:
    """Only what was ordered is confirmed by a write of its own; the next beat tells the rest."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await worker.upkeep.follow()
        seen = "SELECT change_seen FROM worker WHERE id = 'one'"
        before = worker.one(seen)
        await win(worker, 4, WORTH)
        await worker.clerk.teach()
        await worker.upkeep.follow()
        assert worker.one(seen) == before < worker.catalog.change_seen
        await worker.upkeep.keep_time()
        assert worker.one(seen) == worker.catalog.change_seen


async def test_the_log_leaves_what_came_meanwhile_to_its_next_turn(
    migrated_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Else a commit would be made for every few decisions as long as bids come."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(3)
        log = decisions.log

        def while_bids_come(database: Database, rows: list[decisions.Decision]) -> None:
            log(database, rows)
            worker.backlog.add(dict(rows[0]))

        monkeypatch.setattr(decisions, "log", while_bids_come)
        await worker.upkeep.log()
        assert worker.one("SELECT count(*) FROM decision") == 3
        assert len(worker.backlog) == 1
