"""Pacing and return targets through the real stories: order, outcomes, lesson, price and state."""

from __future__ import annotations

from typing import Any

import pytest

from service.api.answers import plain
from service.feedback import Report
from service.learner.memory import Memory
from service.learner.pace_part import Pacing, Spending
from service.learner.pacing import Pace
from service.learner.parts import PACE, RETURN
from service.learner.profile import Plan, Progress
from service.spending import show_spending
from service.store import learners
from service.store.line_items import Row
from service.store.reading import Facts
from service.store.rebuilds import Start, fold_until
from service.teaching import FRESH, lesson
from service.winding import Retraction
from tests.builders import NAME, PRICE, UNIT, Worker, append, line_item, valued, won, working

pytestmark = pytest.mark.anyio

DUAL = {"method": "dual", "profile": None}
MEAN = {"method": "mean"}
# So little that even what a midnight makes due at once is passed by 40 wins.
DAILY = 10 * PRICE
NOON_MS = 1_780_308_000_000  # 2026-06-01T10:00Z, noon in Zurich.


async def spending(worker: Worker) -> dict[str, Any]:
    """The pacing block of the state now."""
    block: dict[str, Any] = (await worker.operator.state(NAME))["pacing"]
    return block


def from_zero(worker: Worker) -> bytes:
    """The state that a fold of the whole stream gives."""
    end = worker.one("SELECT seq FROM balance")
    return worker.database.read(lambda c: fold_until(c, NAME, Start(0, FRESH), end, lesson))


def published(worker: Worker) -> bytes:
    """The state bids are made on."""
    return worker.database.read(lambda c: learners.snapshots(c, [NAME]))[NAME].state


async def test_fast_spend_lowers_bids_and_the_state_says_so(migrated_url: str) -> None:
    """The log, the answer and the state name pacing; a day's budget is the plan."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN, pacing=DUAL, daily_budget=DAILY)
        await worker.learn()
        fresh = await worker.bid()
        assert (await spending(worker))["share_of_value_bid"] == 1.0
        append(worker.database, *(won(n)._replace(cost=PRICE) for n in range(1, 41)))
        append(worker.database, *(valued(n, 4_000_000) for n in range(1, 41)))
        await worker.learn()
        held, seen = await worker.bid(), await spending(worker)
        assert (fresh.set_by, held.set_by) == ("value", "pacing")
        assert held.bid is not None
        assert fresh.bid is not None
        assert held.bid == pytest.approx(4_000_000 * seen["share_of_value_bid"], rel=0.2)
        assert seen["method"] == "dual"
        assert 0.0 < seen["share_of_value_bid"] < 1.0


async def test_an_edit_of_the_budget_reaches_the_plan_and_a_rebuild_agrees(
    migrated_url: str,
) -> None:
    """Costs of the entries count, and pacing that is switched on knows what was spent before."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN, daily_budget=UNIT // 2)
        answers = await worker.bids(3)
        await worker.report(*(Report("won", one.ticket, clearing=PRICE) for one in answers))
        await worker.learn()
        assert Memory.from_bytes(published(worker)).part(PACE) == b""
        target = {"value_per_unit": 2_000_000, "strict": False}
        change = {"pacing": DUAL, "return_target": target, "daily_budget": UNIT}
        await worker.operator.patch(NAME, change, 1, None, None, "tester")
        await worker.learn()
        memory = Memory.from_bytes(published(worker))
        now = Pacing.from_bytes(memory.part(PACE))
        assert (now.spending.plan.daily, now.progress.total) == (UNIT, 3 * PRICE)
        assert memory.part(RETURN) != b""
        assert published(worker) == from_zero(worker)
        assert (await spending(worker))["return_target"]["paid_nanos"] == 3 * PRICE


async def test_another_target_passes_until_the_stream_is_read_by_it(migrated_url: str) -> None:
    """No bid is made by a multiplier of the target before."""
    async with working(migrated_url) as worker:
        target = {"value_per_unit": 2_000_000, "strict": False}
        await worker.create(policy=MEAN, return_target=target)
        await worker.learn()
        assert (await worker.bid()).set_by == "return_target"
        change = {"return_target": {**target, "value_per_unit": 3_000_000}}
        await worker.operator.patch(NAME, change, 1, None, None, "tester")
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "learner_halted"
        assert (await spending(worker))["return_target"]["so_far"] is None
        await worker.learn()
        assert (await worker.bid()).set_by == "return_target"


async def test_a_retracted_win_has_still_cost_its_money(migrated_url: str) -> None:
    """The day's spend keeps it, the return forgets it, and a fold from zero agrees."""
    async with working(migrated_url) as worker:
        target = {"value_per_unit": 2_000_000, "strict": False}
        await worker.create(policy=MEAN, pacing=DUAL, daily_budget=UNIT, return_target=target)
        (answer,) = await worker.bids(1)
        await worker.report(Report("won", answer.ticket, clearing=PRICE))
        await worker.learn()
        assert (await spending(worker))["spent_today_nanos"] == PRICE
        wish = Retraction("both", refs=(answer.ref or "",))
        await worker.operator.winding.retract(NAME, wish, "a broken pixel", "tester")
        await worker.learn()
        seen = await spending(worker)
        assert (seen["spent_today_nanos"], seen["return_target"]["paid_nanos"]) == (PRICE, 0)
        assert published(worker) == from_zero(worker)


async def test_the_state_says_where_nothing_is_paced(migrated_url: str) -> None:
    """Each reason in words, and amounts as callers read them."""
    async with working(migrated_url) as worker:
        await worker.create()
        assert (await spending(worker))["says"].startswith("bids are not paced")
        await worker.create(id="bare", pacing=DUAL)
        await worker.clerk.teach()
        bare = (await worker.operator.state("bare"))["pacing"]
        assert bare["says"].startswith("nothing to hold to")
        await worker.create(id="paced", pacing=DUAL, daily_budget=UNIT)
        early = (await worker.operator.state("paced"))["pacing"]
        assert early["says"].startswith("no lesson yet")
        await worker.clerk.teach()
        told = plain((await worker.operator.state("paced"))["pacing"])
        assert (told["spent_today"], told["left_today"]) == ("0.00", "1.00")
        assert told["money_ends_at"] is None
        assert "no theorem covers" in told["guarantee"]


def noon(spent: int, budget: int, created_ms: int = 0) -> dict[str, Any]:
    """The block of a line item at noon of its zone, so much spent since midnight."""
    config = line_item(pacing=DUAL, daily_budget=budget)
    plan = Plan("Europe/Zurich", daily=budget)
    state = Pacing(Spending("dual", plan, PRICE, 60_000), Pace(0), Progress(NOON_MS, spent, spent))
    memory = Memory(parts=((PACE, state.to_bytes()),))
    row = Row(NAME, config, 1, created_ms, created_ms, [])
    snapshot = learners.Snapshot(1, memory.to_bytes(), "", 0)
    return show_spending(Facts(row, {}, None, [], snapshot, 1, {}, {}, 0, NOON_MS), memory)


def test_the_plan_by_now_and_the_end_of_the_money_are_told() -> None:
    """Half a day is half the money; twice as fast it ends now and a half later, never beyond."""
    even = noon(UNIT, 2 * UNIT)
    assert (even["spent_today_nanos"], even["planned_by_now_nanos"]) == (UNIT, UNIT)
    assert (even["money_ends_ms"], even["left_today_nanos"]) == (None, UNIT)
    fast = noon(UNIT, 3 * UNIT // 2)
    assert fast["money_ends_ms"] == NOON_MS + 6 * 3_600_000
    assert fast["planned_by_now_nanos"] == 3 * UNIT // 4
    assert noon(0, UNIT)["money_says"].startswith("nothing was spent")


def test_a_line_item_that_began_in_the_day_had_no_plan_before() -> None:
    """Created at nine, a fifth of its hours are over by noon, and so is a fifth of its plan."""
    late = noon(UNIT, 5 * UNIT, created_ms=NOON_MS - 3 * 3_600_000)
    assert late["planned_by_now_nanos"] == UNIT
