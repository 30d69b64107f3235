"""Rehearsals asked for, played in processes of their own, shown, cancelled, lost."""

from __future__ import annotations

import asyncio
import os
import signal
import subprocess
import sys
import time
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any

import pytest

from service.errors import Conflict, Malformed, NotFound
from service.feedback import Report
from service.ordering import Orders
from service.rehearsing import Rehearsals, Stalls, _hand_over
from tests.builders import NAME, UNIT, Worker, working

pytestmark = pytest.mark.anyio

ENDED = ("done", "failed", "cancelled", "lost")
BODY = {"ceiling": UNIT // 10, "typical": UNIT // 50}


def wish(**changes: Any) -> dict[str, Any]:
    """What the form makes of a small rehearsal of the flat line item and of one that learns."""
    market = {
        **{"kind": "iid", "auction": "second", "rivals": None, "values": None, "floor": 0},
        **{"span_ms": 86_400_000, "value_delay_mean_ms": 0, "outcome_delay_ms": 0},
        **{"lost_share": 0.0, "change": 0.25, "gap": 0.05, "bidders": 2, "seller": "fixed"},
    }
    named = [
        {"name": "as it is", "changes": {}},
        {"name": "learning", "changes": {"policy": {"method": "kl-ucbid"}}},
    ]
    asked = {
        **{"name": "try", "line_item": NAME, "config": None, "policies": named},
        **{"rounds": 200, "seeds": 2, "seed": 0, "block": 20},
        **changes,
    }
    return {**asked, "market": {**market, **asked.get("market", {})}}


LONG = {"rounds": 1_000_000, "seeds": 10, "block": 1, "market": {"lost_share": 0.5}}


@asynccontextmanager
async def rehearsing(
    url: str, stalls: Stalls | None = None
) -> AsyncIterator[tuple[Worker, Rehearsals]]:
    """A worker with the flat line item, and its rehearsals."""
    async with working(url) as worker:
        await worker.create()
        orders = Orders(worker.database, worker.threads, asyncio.Event())
        story = Rehearsals(orders, "one", stalls or Stalls())
        try:
            yield worker, story
        finally:
            await asyncio.to_thread(story.close)


async def until(story: Rehearsals, number: str, *states: str) -> dict[str, Any]:
    """Wait until a rehearsal is in one of these states."""
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline:
        shown = await story.one(int(number))
        if shown["state"] in states:
            return shown
        await asyncio.sleep(0.05)
    raise AssertionError(f"still {shown['state']}: {shown['error']}")


async def test_a_rehearsal_is_played_and_kept(migrated_url: str) -> None:
    """It is queued at once, done a little later, with both policies' figures and progress 1."""
    async with rehearsing(migrated_url) as (worker, story):
        asked = await story.ask(wish(), "Ann Example", "once")
        assert (asked["state"], asked["progress"], asked["line_item"]) == ("queued", 0.0, NAME)
        again = await story.ask(wish(), "Ann Example", "once")
        assert again["id"] == asked["id"]
        shown = await until(story, asked["id"], *ENDED)
        assert (shown["state"], shown["progress"], shown["error"]) == ("done", 1.0, None)
        names = [one["name"] for one in shown["result"]["policies"]]
        assert names == ["as it is", "learning"]
        assert shown["result"]["policies"][0]["bids"]["mean"] == 200.0
        assert [row["id"] for row in await story.page(None, 10)] == [asked["id"]]
        assert await story.page(int(asked["id"]), 10) == []
        assert worker.column("SELECT action FROM journal ORDER BY number")[-1] == "rehearse"


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_cancelling_kills_its_process(migrated_url: str) -> None:
    """What plays is killed within a moment, what waits never begins, and both say so."""
    async with rehearsing(migrated_url) as (_, story):
        plays, waits = [await story.ask(wish(**LONG), "Ann") for _ in range(2)]
        await until(story, plays["id"], "running")
        child = await process_of(story, int(plays["id"]))
        await story.cancel(int(waits["id"]), "not needed", "Ann")
        await story.cancel(int(plays["id"]), "too long", "Ann")
        assert (await until(story, plays["id"], *ENDED))["state"] == "cancelled"
        assert (await until(story, waits["id"], *ENDED))["state"] == "cancelled"
        assert not os.path.exists(f"/proc/{child}") or await ended(child)


async def process_of(story: Rehearsals, number: int) -> int:
    """The process that plays a rehearsal, once there is one."""
    while number not in story._children:
        await asyncio.sleep(0.02)
    return story._children[number].pid


async def nice(process: int) -> bool:
    """Whether a process gives way to others within seconds."""
    for _ in range(100):
        if os.getpriority(os.PRIO_PROCESS, process) >= 10:
            return True
        await asyncio.sleep(0.05)
    return False


async def ended(process: int) -> bool:
    """Whether a process is gone within seconds."""
    for _ in range(100):
        if not os.path.exists(f"/proc/{process}"):
            return True
        await asyncio.sleep(0.05)
    return False


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_the_queue_is_bounded_and_a_stop_loses_what_is_open(migrated_url: str) -> None:
    """One plays and one waits; a third is refused; after a stop both are lost."""
    async with rehearsing(migrated_url, Stalls(1, 1)) as (_, story):
        first = await story.ask(wish(**LONG), "Ann")
        await until(story, first["id"], "running")
        child = await process_of(story, int(first["id"]))
        assert await nice(child)
        second = await story.ask(wish(**LONG), "Ann")
        with pytest.raises(Conflict, match="2 rehearsals"):
            await story.ask(wish(**LONG), "Ann")
        await asyncio.to_thread(story.close)
        assert await ended(child)
        assert (await story.one(int(first["id"])))["state"] == "lost"
        assert (await story.one(int(second["id"])))["state"] == "queued"


async def test_what_a_dead_worker_left_is_lost(migrated_url: str) -> None:
    """It is shown as lost as soon as its worker's heart has stopped, and closed by the clerk."""
    async with rehearsing(migrated_url) as (worker, story):
        asked = await story.ask(wish(), "Ann")
        await until(story, asked["id"], *ENDED)
        worker.run("UPDATE rehearsal SET state = 'running', worker = 'gone', ended_ms = NULL")
        assert (await story.one(int(asked["id"])))["state"] == "lost"
        await worker.clerk.prune()
        assert worker.one("SELECT state FROM rehearsal") == "lost"
        worker.run("UPDATE rehearsal SET created_ms = 0")
        await worker.clerk.prune()
        assert worker.column("SELECT number FROM rehearsal") == []


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_what_cannot_be_rehearsed_is_refused(migrated_url: str) -> None:
    """An unknown line item, an impossible policy, a curve and a log without anything in them."""
    async with rehearsing(migrated_url) as (worker, story):
        with pytest.raises(NotFound):
            await story.ask(wish(line_item="nobody"), "Ann")
        tree = [{"name": "tree", "changes": {"policy": {"method": "exptree-win-only"}}}]
        with pytest.raises(Malformed, match="second price"):
            await story.ask(wish(policies=tree, market={"auction": "first"}), "Ann")
        with pytest.raises(Malformed, match="competing bids"):
            await story.ask(wish(market={"kind": "own_curve"}), "Ann")
        with pytest.raises(Conflict, match="decision"):
            await story.ask(wish(market={"kind": "own_log"}), "Ann")
        with pytest.raises(NotFound):
            await story.one(7)
        assert worker.column("SELECT number FROM rehearsal") == []


async def played_log(worker: Worker) -> None:
    """Ten bids of one CPM: five won at half of it, one of them worth something, four lost."""
    answers = await worker.bids(10)
    for number, answer in enumerate(answers[:9]):
        won = number < 5
        report = (
            Report("won", ticket=answer.ticket, clearing=500_000 + number)
            if won
            else Report("lost", ticket=answer.ticket, to_win=2_000_000)
        )
        receipts = await worker.report(report)
        assert receipts[0].status == "recorded"
    await worker.report(Report("value", ref=answers[0].ref, value=2_000_000, event_id="a"))
    await worker.upkeep.log()
    await worker.learn()


async def test_a_log_is_replayed_as_it_was(migrated_url: str) -> None:
    """The flat policy wins again what it won, at the same cost, and a dearer one the losses too."""
    async with rehearsing(migrated_url) as (worker, story):
        await played_log(worker)
        dear = {"policy": {"method": "flat", "price": 3_000_000}}
        named = [{"name": "as it was", "changes": {}}, {"name": "dear", "changes": dear}]
        asked = await story.ask(wish(policies=named, market={"kind": "own_log"}, seeds=1), "Ann")
        shown = await until(story, asked["id"], *ENDED)
        assert (shown["state"], shown["error"], shown["progress"]) == ("done", None, 1.0)
        same, more = shown["result"]["policies"]
        assert (same["wins"]["mean"], same["bids"]["mean"]) == (5.0, 10.0)
        assert same["spend"]["mean_nanos"] == 5 * 500_000 + 10
        # One win has had its word; of the others nobody knows, and the mean stands in for them.
        assert same["value"]["mean_nanos"] == 2_000_000
        assert same["wins_of_unknown_value"]["mean"] == 4
        assert same["surplus_exact"]["mean_nanos"] == 2_000_000 - 500_000
        assert same["surplus"]["mean_nanos"] == 10_000_000 - same["spend"]["mean_nanos"]
        # The tenth was never answered: nobody knows what would have won it.
        assert same["auctions_of_unknown_outcome"]["mean"] == 1
        # At 3 CPM it wins the four lost ones too: what would have won them was told.
        assert more["wins"]["mean"] == 9
        assert shown["result"]["exact"]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_the_own_curve_is_a_market(migrated_url: str) -> None:
    """Competing bids are drawn from what was learnt of them; what it assumes is said."""
    async with rehearsing(migrated_url) as (worker, story):
        await played_log(worker)
        asked = await story.ask(wish(market={"kind": "own_curve"}), "Ann")
        shown = await until(story, asked["id"], *ENDED)
        assert (shown["state"], shown["error"]) == ("done", None)
        flat = shown["result"]["policies"][0]
        # Five of nine were won at half a CPM; the rest of the curve is beyond the bid.
        assert 0.4 < flat["wins"]["mean"] / 200 < 0.7
        assert any("win curve" in line for line in shown["result"]["assumed"])


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_process_that_dies_is_a_failure_with_its_words(migrated_url: str) -> None:
    """Killed by somebody else it neither hangs nor counts as done."""
    async with rehearsing(migrated_url) as (_, story):
        asked = await story.ask(wish(**LONG), "Ann")
        os.kill(await process_of(story, int(asked["id"])), signal.SIGKILL)
        shown = await until(story, asked["id"], *ENDED)
        assert shown["state"] == "failed"
        assert "-9" in shown["error"]


def test_a_process_that_is_killed_before_it_has_read_leaves_no_error() -> None:
    """Its order is lost and its pipes close; an error here would leave the rehearsal open."""
    child = subprocess.Popen([sys.executable, "-c", ""], stdin=subprocess.PIPE, text=True)
    with child:
        child.wait(20)
        _hand_over(child, {"name": "x"})
    assert child.returncode == 0
