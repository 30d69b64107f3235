"""How much money lies in holds while all runs well, and how much of a budget is spent in the end.

Real workers on a real database whose clocks are moved by hand: a bid every 25 ms of theirs.
"""

from __future__ import annotations

import asyncio
import sys
from collections import deque
from contextlib import AsyncExitStack
from dataclasses import dataclass, field

import numpy as np
import pytest

from service.feedback import Report
from service.store import leases, workers
from service.store.database import Writing
from tests.builders import LEASE_S, PRICE, UNIT, Worker, pass_service_ms, working

pytestmark = pytest.mark.anyio

BIDS_A_SECOND = 40
BUDGET = 500 * UNIT
DELAY_S = 2  # From a bid to the report of its loss.
WARM_UP_S = 60
SPENT_SHARE_MIN = 0.995


@dataclass
class Minutes:
    """One worker that bids at an even pace; its seconds are counted, not waited for."""

    worker: Worker
    reported: bool
    held: list[int] = field(default_factory=list)
    _told: deque[list[Report]] = field(default_factory=deque)

    async def pass_seconds(self, seconds: int) -> None:
        """Bid, report, give back, close and look, second by second."""
        for second in range(seconds):
            await self._bid()
            pass_service_ms(self.worker.database, 1000)
            await self.worker.upkeep.give_back()
            leases.close_due(self.worker.database)
            if second % 10 == 0:
                await self.worker.leasing.tick()
                beat(self.worker, "one")
            self.held.append(self.worker.balance()["held"])

    async def _bid(self) -> None:
        told = []
        for _ in range(BIDS_A_SECOND):
            answer = await self.worker.bid()
            if answer.bid is None:
                raise ValueError(f"passed: {answer.reason}")
            told.append(Report("lost", answer.ticket))
            self.worker.clock.now += 1 / BIDS_A_SECOND
            # The lease that was asked for may come meanwhile, as beside a real server.
            await asyncio.sleep(0)
        self._told.append(told)
        if self.reported and len(self._told) > DELAY_S:
            await self.worker.report(*self._told.popleft())


def beat(worker: Worker, name: str) -> None:
    """Say that a worker lives, as its upkeep would."""

    def work(connection: Writing) -> None:
        workers.beat(connection, name, 0, 0)

    worker.database.write(work)


async def seconds_of(url: str, seconds: int, *, reported: bool, grace_s: int) -> list[int]:
    """What was held at the end of each simulated second."""
    async with working(url) as worker:
        await worker.create(budget=BUDGET, grace_ms=grace_s * 1000, bid_cap=4 * PRICE)
        minutes = Minutes(worker, reported)
        await minutes.pass_seconds(seconds)
        assert worker.audit() == []
        return minutes.held


async def little_is_held(url: str, seconds: int) -> float:
    """The largest share of the budget that was held after the first minute."""
    held = await seconds_of(url, seconds, reported=True, grace_s=900)
    share = max(held[WARM_UP_S:]) / BUDGET
    assert 0 < share < 0.02
    return share


async def silence_holds_its_grace(url: str, grace_s: int) -> tuple[float, float]:
    """Held at the end over rate × price × grace: that, the life of a slice and one slice."""
    held = await seconds_of(url, grace_s + 3 * LEASE_S, reported=False, grace_s=grace_s)
    a_second = BIDS_A_SECOND * PRICE
    in_grace = a_second * grace_s
    slices = 2 * a_second * LEASE_S
    end = held[-LEASE_S:]
    assert min(end) >= in_grace
    assert max(end) <= in_grace + slices
    return max(end) / in_grace, in_grace / UNIT


async def test_little_is_held_while_losses_are_reported(migrated_url: str) -> None:
    """Four minutes of forty bids a second: under a fiftieth of the budget."""
    await little_is_held(migrated_url, 240)


async def test_silence_holds_rate_times_price_times_grace(migrated_url: str) -> None:
    """Losses that nobody reports: two minutes of grace hold two minutes of bids, no more."""
    await silence_holds_its_grace(migrated_url, 120)


@pytest.mark.long
@pytest.mark.timeout(1800)
async def test_little_is_held_for_two_hours(migrated_url: str) -> None:
    """The same for two simulated hours."""
    share = await little_is_held(migrated_url, 7200)
    sys.stdout.write(f"largest share of the budget held: {share:.4%}\n")


@pytest.mark.long
@pytest.mark.timeout(1800)
async def test_silence_holds_a_quarter_of_an_hour(migrated_url: str) -> None:
    """The same with the usual grace of 900 seconds."""
    times, units = await silence_holds_its_grace(migrated_url, 900)
    sys.stdout.write(f"held: {times:.4f} times the {units} units of rate x price x grace\n")


@pytest.mark.parametrize("count", [1, 4])
async def test_a_fully_demanded_budget_is_spent(migrated_url: str, count: int) -> None:
    """Won below the bid or lost, and told seconds later; in the end almost nothing is left over."""
    budget, rivals = 2000 * PRICE, np.random.default_rng(5)
    async with AsyncExitStack() as stack:
        crew = [
            await stack.enter_async_context(working(migrated_url, f"w{n}")) for n in range(count)
        ]
        await crew[0].create(budget=budget, bid_cap=4 * PRICE)
        waiting: deque[list[Report]] = deque()
        for _ in range(60 * LEASE_S):
            waiting.append(await round_of(crew, rivals))
            if len(waiting) > 4:
                told = waiting.popleft()
                if told:
                    await crew[0].report(*told)
            if crew[0].balance()["spent"] >= SPENT_SHARE_MIN * budget:
                break
        spent = crew[0].balance()["spent"]
        assert crew[0].audit() == []
    assert SPENT_SHARE_MIN * budget <= spent <= budget


async def round_of(crew: list[Worker], rivals: np.random.Generator) -> list[Report]:
    """Half a second: each worker is asked ten times, against rivals of every height."""
    told = []
    for worker in crew:
        for _ in range(10):
            answer = await worker.bid(deadline_ms=50)
            worker.clock.now += 0.05
            rival = int(rivals.integers(1, PRICE * 3 // 2))
            if answer.bid is not None and rival < answer.bid:
                told.append(Report("won", answer.ticket, clearing=rival))
            elif answer.bid is not None:
                told.append(Report("lost", answer.ticket, to_win=rival))
        await worker.upkeep.give_back()
    pass_service_ms(crew[0].database, 500)
    for number, worker in enumerate(crew):
        beat(worker, f"w{number}")
    leases.close_due(crew[0].database)
    return told
