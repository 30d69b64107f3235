"""The first story over a real database: every reason to pass, and what a price is taken out of."""

from __future__ import annotations

import asyncio
import threading
import time
from contextlib import closing
from typing import Any

import pytest
from sqlalchemy import event, text

from service.bidding import Answer
from service.decision.opportunity import Opportunity
from service.errors import NotFound, Refusal
from service.feedback import Report
from service.guard.ticket import Ticket, TicketKeys
from service.store import changes, freezes
from service.store.database import Database, Writing
from tests.builders import CAP, NAME, PRICE, Worker, append, begin, running_beside, won, working

pytestmark = pytest.mark.anyio

FAR_MS = 4 * 10**12  # In the next century.
MEAN = {"method": "mean"}
LIGHT = {"per_impression": CAP // 2, "conversions": 1e-9}  # A guess that one value outweighs.


def ticket_of(worker: Worker, answer: Answer) -> Ticket:
    """The ticket of an answer, verified with the key that the database keeps."""
    key = bytes.fromhex(worker.one("SELECT value FROM fact WHERE name = 'ticket_key'"))
    return TicketKeys([key]).verify(answer.ticket or "")


async def win_nothing(worker: Worker) -> None:
    """Win one impression and learn that it brought nothing."""
    (answer,) = await worker.bids(1)
    reports = [Report("won", answer.ticket, clearing=1)]
    reports.append(Report("value", answer.ticket, value=0, event_id="a"))
    await worker.report(*reports)
    await worker.learn()


async def test_a_bid_takes_its_price_out_of_a_slice(migrated_url: str) -> None:
    """A price leaves with a ticket, out of a slice that the database holds for it."""
    async with working(migrated_url) as worker:
        await worker.create()
        answer = await worker.bid(request_id="op-1")
        assert (answer.bid, answer.reason, answer.request_id) == (PRICE, None, "op-1")
        assert (answer.set_by, answer.method) == ("value", "flat")
        held = worker.leasing.hand.slices[NAME]
        assert (held.issued, held.bids) == (PRICE, 1)
        assert worker.balance()["held"] == held.amount == 16 * CAP


async def test_a_ticket_says_what_its_outcome_needs(migrated_url: str) -> None:
    """Slice, place in it, price and source travel with the bid, and the ref is its short form."""
    async with working(migrated_url) as worker:
        await worker.create()
        first, second = await worker.bid(), await worker.bid(source="north-exchange")
        held, ticket = worker.leasing.hand.slices[NAME], ticket_of(worker, second)
        assert (ticket.slice, ticket.counter, ticket.price) == (held.id, 1, PRICE)
        assert (ticket.line_item, ticket.source, ticket.test) == (NAME, "north-exchange", False)
        assert ticket.ref == second.ref != first.ref


async def test_an_unknown_line_item_is_not_found(migrated_url: str) -> None:
    """A bid for a line item that does not exist is refused, and found once it is created."""
    async with working(migrated_url) as worker:
        with pytest.raises(NotFound):
            await worker.bid()
        await worker.create()
        await worker.upkeep.follow()
        assert (await worker.bid()).bid == PRICE


async def test_an_unknown_line_item_spoils_only_its_own_row(migrated_url: str) -> None:
    """A batch answers each opportunity in its place."""
    async with working(migrated_url) as worker:
        await worker.create()
        wanted = [Opportunity(name, deadline_ms=5000) for name in (NAME, "meadow", NAME)]
        first, second, third = await worker.bidder.bid_batch(wanted, time.monotonic())
        assert isinstance(second, Refusal)
        assert second.code == "no_such_line_item"
        assert [a.bid for a in (first, third) if isinstance(a, Answer)] == [PRICE, PRICE]


async def test_a_frozen_line_item_passes_before_anything_else(migrated_url: str) -> None:
    """The freeze is named although the flight is over too, and nothing is leased."""
    async with working(migrated_url) as worker:
        await worker.create(flight={"ends_ms": 1})
        async with running_beside(worker):
            await worker.operator.freeze(NAME, "a look", "tester")
        assert (await worker.bid()).reason == "frozen"
        assert worker.balance()["held"] == 0


@pytest.mark.parametrize("flight", [{"starts_ms": FAR_MS}, {"ends_ms": 1}])
async def test_nothing_is_bid_outside_the_flight(migrated_url: str, flight: Any) -> None:
    """Neither before it begins nor after it ends."""
    async with working(migrated_url) as worker:
        await worker.create(flight=flight)
        assert (await worker.bid()).reason == "out_of_flight"
        assert worker.balance()["held"] == 0


@pytest.mark.parametrize(
    ("limit", "reason"), [("budget", "budget_spent"), ("daily_budget", "day_spent")]
)
async def test_spent_money_is_named(migrated_url: str, limit: str, reason: str) -> None:
    """Held money may come free, so it is another word than spent money."""
    async with working(migrated_url) as worker:
        await worker.create(**{limit: PRICE})
        (answer,) = await worker.bids(1)
        assert (await worker.bid()).reason == "budget_held"
        await worker.report(Report("won", answer.ticket, clearing=PRICE))
        worker.clock.now += 1
        assert (await worker.bid()).reason == reason
        assert (await worker.bid(floor=CAP)).reason == reason


async def test_the_tail_of_a_budget_is_bid(migrated_url: str) -> None:
    """The rest in the hand sets the price where it is less, if the floor allows."""
    async with working(migrated_url) as worker:
        await worker.create(budget=PRICE + PRICE // 2)
        await worker.bids(1)
        assert (await worker.bid(floor=PRICE)).reason == "budget_held"
        last = await worker.bid()
        assert (last.bid, last.set_by) == (PRICE // 2, "money_in_hand")


async def test_what_is_in_the_hand_may_be_spent_whatever_the_budget_says(migrated_url: str) -> None:
    """A budget lowered to what is spent stops leases; held money was promised before."""
    async with working(migrated_url) as worker:
        await worker.create(budget=PRICE + PRICE // 2)
        (answer,) = await worker.bids(1)
        await worker.report(Report("won", answer.ticket, clearing=PRICE))
        await worker.operator.patch(NAME, {"budget": PRICE}, 1, None, None, "tester")
        await worker.upkeep.follow()
        assert (await worker.bid()).bid == PRICE // 2
        assert worker.leasing.denied(NAME) == "budget_spent"
        assert (await worker.bid()).reason == "budget_spent"


def freeze(connection: Writing, name: str) -> None:
    """Freeze and announce it, as an order of another worker does."""
    freezes.put(connection, name, "person", wall_ms=1, actor="tester", reason="")
    changes.announce(connection, "freeze", [name])


async def test_a_freeze_that_comes_while_a_bid_waits_is_obeyed(migrated_url: str) -> None:
    """The line item is looked at again after the wait for money."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bid(test=True)
        go, reached = threading.Event(), threading.Event()

        def wait(*_: object) -> None:
            if worker.leasing.hand.slices == {} and not reached.is_set():
                reached.set()
                go.wait(5)

        # The slice is leased, and its answer has not yet come back to the loop.
        event.listen(worker.database.engine, "checkin", wait)
        asking = asyncio.create_task(worker.bid())
        assert await asyncio.to_thread(reached.wait, 5)
        with closing(Database(migrated_url)) as other:
            other.write(lambda c: freeze(c, NAME))
        await worker.catalog.follow()
        go.set()
        assert (await asking).reason == "frozen"
        assert worker.leasing.hand.slices[NAME].bids == 0


async def test_a_price_that_comes_too_late_is_a_pass(migrated_url: str) -> None:
    """A caller who has stopped waiting gets no price that would hold money."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        late = Opportunity(NAME, deadline_ms=50)
        answer = await worker.bidder.bid(late, time.monotonic() - 0.051)
        assert answer.reason == "past_deadline"
        assert worker.leasing.hand.slices[NAME].bids == 1


async def test_a_bid_waits_for_a_slice_no_longer_than_its_deadline(migrated_url: str) -> None:
    """While somebody else holds the row, the wait ends in time and the slice comes later."""
    async with working(migrated_url) as worker:
        await worker.create()
        with worker.database.engine.begin() as other:
            other.execute(text("UPDATE balance SET at_ms = at_ms"))
            began = time.monotonic()
            answer = await worker.bid(deadline_ms=60)
            assert answer.reason == "past_deadline"
            assert time.monotonic() - began < 1
        assert (await worker.bid()).bid == PRICE


async def test_no_good_snapshot_is_no_price(migrated_url: str) -> None:
    """A state that is not what was published is never bid from."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        worker.run("UPDATE learner SET digest = 'another'")
        assert (await worker.bid()).reason == "learner_halted"
        assert (await worker.bid(floor=CAP)).reason == "learner_halted"


async def test_a_silent_value_feed_stops_buying(migrated_url: str) -> None:
    """With more than fifty wins whose value is unknown the next would be bought blind."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        append(worker.database, *(won(number) for number in range(50)))
        await worker.learn()
        assert (await worker.bid()).bid is not None
        append(worker.database, won(50))
        await worker.learn()
        assert (await worker.bid()).reason == "no_value"


async def test_a_worthless_impression_is_a_pass(migrated_url: str) -> None:
    """A value below one nano is no price, whatever the floor."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN, value={"expected": LIGHT})
        await win_nothing(worker)
        assert (await worker.bid()).reason == "price_rounds_to_zero"
        assert (await worker.bid(floor=CAP)).reason == "price_rounds_to_zero"


async def test_a_floor_above_the_price_is_a_pass_that_is_counted(migrated_url: str) -> None:
    """An equal floor is met; a higher one is a round that lost, and a test is no round."""
    async with working(migrated_url) as worker:
        await worker.create()
        assert (await worker.bid(floor=PRICE)).bid == PRICE
        assert (await worker.bid(floor=PRICE + 1)).reason == "under_floor"
        assert (await worker.bid(floor=PRICE + 1, test=True)).reason == "under_floor"
        assert worker.leasing.hand.under_floor == {NAME: 1}


async def test_a_test_takes_no_hold(migrated_url: str) -> None:
    """It is answered and signed like any other, and nothing is leased, booked or learnt."""
    async with working(migrated_url) as worker:
        await worker.create()
        answer = await worker.bid(test=True)
        assert (answer.bid, ticket_of(worker, answer).test) == (PRICE, True)
        assert (worker.balance()["held"], worker.leasing.hand.slices) == (0, {})
        (receipt,) = await worker.report(Report("won", answer.ticket, clearing=PRICE))
        assert (receipt.status, receipt.test) == ("recorded", True)
        assert worker.column("SELECT kind FROM stream") == ["create"]


async def test_many_bids_at_once_share_one_lease(migrated_url: str) -> None:
    """Whoever finds no money waits for the same slice, and each price leaves it once."""
    async with working(migrated_url) as worker:
        await worker.create()
        answers = await asyncio.gather(*(worker.bid() for _ in range(40)))
        assert len({answer.ref for answer in answers}) == 40
        assert worker.one("SELECT count(*) FROM slice") == 1
        assert worker.leasing.hand.slices[NAME].issued == 40 * PRICE


async def test_every_answer_is_queued_for_the_log(migrated_url: str) -> None:
    """Bids and passes alike, with what set them."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        await worker.bid(request_id="op-1")
        await worker.bid(request_id="op-2", floor=CAP)
        await worker.upkeep.log()
        assert worker.column("SELECT price FROM decision ORDER BY number") == [PRICE, None]
        assert worker.column("SELECT set_by FROM decision ORDER BY number") == ["value", None]
        assert worker.column("SELECT reason FROM decision ORDER BY number") == [None, "under_floor"]
