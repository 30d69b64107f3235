"""The second story over a real database: what each report becomes, and when its receipt leaves."""

from __future__ import annotations

import asyncio
import json
import threading
from collections.abc import Callable
from typing import TypeVar

import pytest
from sqlalchemy import event

from service.errors import StoreAway
from service.feedback import Receipt, Report
from service.store.database import Writing
from tests.builders import GRACE_MS, LEASE_S, NAME, PRICE, UNIT, Worker, outage, working

pytestmark = pytest.mark.anyio

T = TypeVar("T")
CEILING = 100_000_000
CLOSED_MS = LEASE_S * 1000 + GRACE_MS


def won(ticket: str | None, price: int = PRICE) -> Report:
    """A win at this price."""
    return Report("won", ticket, clearing=price)


def valued(
    ref: str | None, value: int = 5, event_id: str = "a", corrects: str | None = None
) -> Report:
    """A value by ref alone."""
    return Report("value", ref=ref, value=value, event_id=event_id, corrects=corrects)


def said(receipts: list[Receipt]) -> list[str]:
    """The code of each receipt, or its status."""
    return [receipt.code or receipt.status for receipt in receipts]


class Commits:
    """Counts the commits of a worker's database while it is open."""

    def __init__(self, worker: Worker) -> None:
        self.count = 0
        event.listen(worker.database.engine, "commit", self._seen)

    def _seen(self, _connection: object) -> None:
        self.count += 1


async def test_each_outcome_gets_its_status(migrated_url: str) -> None:
    """Recorded, duplicate, conflict, parked, refused and late, each with its money."""
    async with working(migrated_url) as worker:
        await worker.create()
        one, two, three = await worker.bids(3)
        assert said(await worker.report(won(one.ticket))) == ["recorded"]
        assert said(await worker.report(won(one.ticket))) == ["duplicate"]
        assert said(await worker.report(won(one.ticket, PRICE - 1))) == ["conflict"]
        early = Report("value", two.ticket, value=5, event_id="a")
        assert said(await worker.report(early)) == ["parked"]
        assert said(await worker.report(Report("won", two.ticket))) == ["no_price"]
        worker.pass_service_ms(CLOSED_MS)
        await worker.keep_time()
        assert said(await worker.report(won(three.ticket, 7))) == ["late"]
        assert worker.balance() | {"at_ms": 0, "seq": 0} == {
            **{"line_item": NAME, "budget": UNIT, "target": UNIT, "at_ms": 0, "seq": 0},
            **{"spent": PRICE + 7, "held": 0, "unfunded": 0, "disputed": 0},
        }
        assert worker.audit() == []


async def test_losses_and_voids_give_the_hold_back(migrated_url: str) -> None:
    """Both free what was held, and only a loss teaches."""
    async with working(migrated_url) as worker:
        await worker.create()
        one, two = await worker.bids(2)
        before = worker.balance()["held"]
        told = await worker.report(Report("lost", one.ticket), Report("void", two.ticket, why="x"))
        assert said(told) == ["recorded", "recorded"]
        assert worker.balance()["held"] == before - 2 * PRICE
        await worker.learn()
        state = await worker.operator.state(NAME)
        assert (state["learner"]["losses"], state["learner"]["wins"]) == (1, 0)


async def test_a_bad_row_spoils_no_other(migrated_url: str) -> None:
    """Every kind of refusal stands in its own place, and is not remembered."""
    async with working(migrated_url) as worker:
        await worker.create()
        one, two = await worker.bids(2)
        forged = (one.ticket or "")[:-3] + "AAA"
        reports = [
            *(won(one.ticket), won(forged), Report("won", ref=one.ref, clearing=1), valued("?")),
            *(valued("A" * 22), Report("won", one.ticket, ref=two.ref, clearing=PRICE)),
            *(valued(one.ref, 100 * CEILING + 1), won(two.ticket)),
        ]
        assert said(await worker.report(*reports)) == [
            *("recorded", "bad_ticket", "no_ticket", "bad_ref", "no_such_ref"),
            *("ref_of_another_bid", "value_out_of_range", "recorded"),
        ]
        assert said(await worker.report(valued(one.ref, 100 * CEILING))) == ["recorded"]


async def test_values_may_come_before_and_after_their_win(migrated_url: str) -> None:
    """By ticket before, by ref after or in the same call; each is taught once."""
    async with working(migrated_url) as worker:
        await worker.create(value={"arrival": "accrues"})
        one, two = await worker.bids(2)
        assert said(await worker.report(valued(one.ref))) == ["no_such_ref"]
        early = Report("value", one.ticket, value=5, event_id="a")
        assert said(await worker.report(early, early)) == ["parked", "duplicate"]
        assert (
            said(await worker.report(won(one.ticket), valued(one.ref, 6, "b"))) == ["recorded"] * 2
        )
        assert said(await worker.report(early, valued(two.ref, 7), won(two.ticket))) == [
            *("duplicate", "parked", "recorded"),
        ]
        bodies = worker.column("SELECT body FROM stream WHERE kind = 'value' ORDER BY seq")
        assert [json.loads(body)["amount"] for body in bodies] == [5, 6, 7]


async def test_a_correction_names_what_it_corrects(migrated_url: str) -> None:
    """It replaces the value it names, and nothing else."""
    async with working(migrated_url) as worker:
        await worker.create()
        (one,) = await worker.bids(1)
        await worker.report(won(one.ticket), valued(one.ref, 3 * CEILING))
        assert said(await worker.report(valued(one.ref, 0, "b", corrects="z"))) == ["no_such_event"]
        assert said(await worker.report(valued(one.ref, 0, "b", corrects="a"))) == ["recorded"]
        assert said(await worker.report(valued(one.ref, 9, "c"))) == ["conflict"]
        await worker.learn()
        learner = (await worker.operator.state(NAME))["learner"]
        assert (learner["wins_with_known_value"], learner["wins_with_value_above_zero"]) == (1, 0)


async def test_what_lies_above_the_ceiling_is_cut_and_says_so(migrated_url: str) -> None:
    """It is kept in full and taught at the ceiling."""
    async with working(migrated_url) as worker:
        await worker.create()
        (one,) = await worker.bids(1)
        _, receipt = await worker.report(won(one.ticket), valued(one.ref, 3 * CEILING))
        assert (receipt.status, receipt.clipped) == ("recorded", True)
        await worker.learn()
        assert (await worker.operator.state(NAME))["certainty"]["mean_nanos"] == CEILING


async def test_requests_that_come_together_share_a_commit(migrated_url: str) -> None:
    """Forty reports at once take a few transactions, not forty."""
    async with working(migrated_url) as worker:
        await worker.create()
        answers = await worker.bids(40)
        commits = Commits(worker)
        told = await asyncio.gather(*(worker.report(won(a.ticket)) for a in answers))
        assert [said(one) for one in told] == [["recorded"]] * 40
        assert commits.count <= 4
        assert worker.balance()["spent"] == 40 * PRICE


async def test_the_receipt_waits_for_the_commit(migrated_url: str) -> None:
    """While the transaction may still fail nobody is told that it is durable."""
    async with working(migrated_url) as worker:
        await worker.create()
        (one,) = await worker.bids(1)
        hold, reached = threading.Event(), threading.Event()

        def wait(_connection: object) -> None:
            reached.set()
            hold.wait(5)

        event.listen(worker.database.engine, "commit", wait)
        asking = asyncio.create_task(worker.report(won(one.ticket)))
        await asyncio.to_thread(reached.wait, 5)
        await asyncio.sleep(0.05)
        assert (reached.is_set(), asking.done()) == (True, False)
        hold.set()
        assert said(await asking) == ["recorded"]


async def test_a_poisoned_row_is_set_aside_and_its_group_goes_on(migrated_url: str) -> None:
    """The row that fails alone is refused and quarantined; its neighbours are booked."""
    async with working(migrated_url) as worker:
        for name in ("garden", "meadow"):
            await worker.create(id=name)
        (good, other), (bad,) = await worker.bids(2), await worker.bids(1, "meadow")
        # Behind the back of the rules: the guard of this balance now refuses every win.
        worker.run("UPDATE balance SET held = 0 WHERE line_item = 'meadow'")
        told = await asyncio.gather(
            worker.report(won(good.ticket), won(bad.ticket)), worker.report(won(other.ticket))
        )
        assert [said(one) for one in told] == [["recorded", "quarantined"], ["recorded"]]
        assert worker.column("SELECT line_item FROM quarantine") == ["meadow"]
        assert (worker.balance()["spent"], worker.balance("meadow")["spent"]) == (2 * PRICE, 0)
        assert (await worker.operator.state("meadow"))["feed"]["quarantined"] == 1


async def test_a_foreign_ticket_takes_the_late_way(migrated_url: str) -> None:
    """After a restore a slice of the same name may be another's, so its hold is not touched."""
    async with working(migrated_url, incarnation=b"elsewhere"[:8]) as old:
        await old.create()
        (one,) = await old.bids(1)
    async with working(migrated_url, "two") as worker:
        held = worker.balance()["held"]
        assert said(await worker.report(won(one.ticket))) == ["late"]
        assert (worker.balance()["spent"], worker.balance()["held"]) == (PRICE, held)
        assert said(await worker.report(won(one.ticket))) == ["duplicate"]


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_while_the_database_is_away_nothing_is_acknowledged(migrated_url: str) -> None:
    """The caller is told to send again; nothing is quarantined, and the repeat is booked once."""
    async with working(migrated_url) as worker:
        await worker.create()
        one, two = await worker.bids(2)
        with outage(migrated_url):
            told = await asyncio.gather(
                *(worker.report(won(a.ticket)) for a in (one, two)), return_exceptions=True
            )
        assert [type(one) for one in told] == [StoreAway, StoreAway]
        assert said(await worker.report(won(one.ticket), won(two.ticket))) == ["recorded"] * 2
        assert worker.one("SELECT count(*) FROM quarantine") == 0


async def test_an_answer_that_was_lost_is_a_duplicate(migrated_url: str) -> None:
    """Committed, but the caller never heard: the same report again moves nothing."""
    async with working(migrated_url) as worker:
        await worker.create()
        (one,) = await worker.bids(1)
        write = worker.database.write

        def lose(work: Callable[[Writing], T]) -> T:
            write(work)
            raise StoreAway("the answer was lost")

        worker.database.write = lose  # type: ignore[method-assign]
        with pytest.raises(StoreAway):
            await worker.report(won(one.ticket))
        worker.database.write = write  # type: ignore[method-assign]
        assert said(await worker.report(won(one.ticket))) == ["duplicate"]
        assert worker.balance()["spent"] == PRICE
