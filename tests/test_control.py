"""A control share from the opportunity to the state: which rule bids, with what money."""

from __future__ import annotations

from typing import Any

import pytest

from service.feedback import Report
from service.guard.control import CONTROL
from tests.builders import CAP, NAME, PRICE, UNIT, Worker, working

pytestmark = pytest.mark.anyio

PLAIN = PRICE // 2
HALF: dict[str, Any] = {"share": 5 * 10**8, "method": "flat", "price": PLAIN}


async def played(worker: Worker, many: int, name: str = "op") -> list[Any]:
    """So many bids under names of their own."""
    return [await worker.bid(request_id=f"{name}-{n}") for n in range(many)]


async def test_a_share_of_requests_is_bid_for_by_the_plain_rule(migrated_url: str) -> None:
    """The same requests each time; the answer names the rule that set the price."""
    async with working(migrated_url) as worker:
        await worker.create(control=HALF)
        first, again = await played(worker, 60), await played(worker, 60)
        plain = [answer for answer in first if answer.set_by == CONTROL]
        assert 10 < len(plain) < 50
        assert {answer.bid for answer in plain} == {PLAIN}
        assert {answer.bid for answer in first if answer.set_by != CONTROL} == {PRICE}
        assert [a.bid for a in again] == [a.bid for a in first]
        await worker.upkeep.log()
        arms = worker.column("SELECT arm FROM decision ORDER BY number")
        assert arms.count(CONTROL) == 2 * len(plain)
        assert set(worker.column("SELECT arm_odds FROM decision")) <= {0.5, 1.0}
        assert set(worker.column("SELECT auction FROM decision")) == {"second"}


async def test_the_arm_never_issues_more_than_its_share_and_nobody_passes_for_it(
    migrated_url: str,
) -> None:
    """A tenth of the traffic at eight times the price: without room the method bids."""
    async with working(migrated_url) as worker:
        wish = {"share": 10**8, "method": "flat", "price": CAP}
        await worker.create(control=wish)
        answers = await played(worker, 200)
        issued = sum(answer.held or 0 for answer in answers)
        by_control = sum(answer.held or 0 for answer in answers if answer.set_by == CONTROL)
        hand = worker.leasing.hand
        in_hand = hand.slices[NAME].free
        assert 0 < by_control <= (issued + in_hand) // 10
        assert by_control == hand.issued[NAME].by_control
        assert all(answer.bid for answer in answers)
        odds = {answer.draw.arm_odds for answer in answers if answer.draw}
        assert odds == {0.1, 0.9, 1.0}


async def test_outcomes_count_for_their_arm_and_the_state_compares_them(
    migrated_url: str,
) -> None:
    """Money and values of each, once their window has closed; the words do not claim a thing."""
    async with working(migrated_url) as worker:
        await worker.create(control=HALF)
        answers = await played(worker, 40)
        await worker.report(*(Report("won", a.ticket, clearing=PRICE) for a in answers))
        reports = [
            Report("value", ref=a.ref, value=10_000_000, event_id=f"e-{n}")
            for n, a in enumerate(answers)
            if a.set_by == CONTROL
        ]
        await worker.report(*reports)
        worker.pass_service_ms(200_000)
        (last,) = await worker.bids(1)
        await worker.report(Report("lost", last.ticket))
        await worker.learn()
        block = (await worker.operator.state(NAME))["control"]
        main, control = block["arms"]
        assert (main["impressions"], control["impressions"]) == (40 - len(reports), len(reports))
        assert control["value_nanos"] == len(reports) * 10_000_000
        # A price above the bid is disputed, and the books count it as little as the arms do.
        assert control["spent_nanos"] == len(reports) * PLAIN
        assert main["value_nanos"] == 0
        assert "cannot tell yet" in block["says"]
        # All of them teach the one learner of the line item.
        assert (await worker.operator.state(NAME))["learner"]["wins"] == 40


async def test_the_arm_ends_with_its_share_of_the_budget(migrated_url: str) -> None:
    """Once the snapshot knows that a tenth is spent, the method bids for all traffic."""
    async with working(migrated_url) as worker:
        wish = {"share": 10**8, "method": "flat", "price": PLAIN}
        await worker.create(budget=UNIT // 50, control=wish)
        for batch in range(20):
            asked = await played(worker, 10, f"batch-{batch}")
            answers = [answer for answer in asked if answer.ticket]
            await worker.report(
                *(
                    Report("won", a.ticket, clearing=PLAIN)
                    if a.set_by == CONTROL
                    else Report("lost", a.ticket)
                    for a in answers
                )
            )
            await worker.learn()
        item = worker.catalog.get(NAME)
        assert item is not None
        assert item.plain is not None
        assert not item.plain.open
        # It is known with the next snapshot, so what left before it may lie above the share.
        assert worker.balance()["spent"] <= UNIT // 50 // 10 + 10 * PLAIN
        assert CONTROL not in {a.set_by for a in await played(worker, 60)}


async def test_a_law_learns_nothing_from_what_it_did_not_draw(migrated_url: str) -> None:
    """Bids of the plain rule carry no chance, and the tree counts their rounds alone."""
    async with working(migrated_url) as worker:
        await worker.create(policy={"method": "exptree-win-only"}, control=HALF)
        answers = await played(worker, 60)
        await worker.report(
            *(Report("won", a.ticket, clearing=1000) for a in answers if a.ticket is not None)
        )
        await worker.learn()
        entries = worker.column("SELECT body FROM stream WHERE kind = 'won' ORDER BY seq")
        plain = [body for body in entries if CONTROL in body]
        assert plain
        assert not any("chance" in body for body in plain)
        assert all("chance" in body for body in entries if body not in plain)
        tree = (await worker.operator.state(NAME))["certainty"]["tree"]
        assert tree["outcomes_without_law_or_price"] == 0
        drawn = [a.draw.odds for a in answers if a.draw and a.set_by != CONTROL]
        # The cap is drawn with a chance of its own, every other price with that of its cell.
        assert all(odds and 0.0 < odds < 1.0 for odds in drawn)
        assert min(odds or 1.0 for odds in drawn) < 0.001


async def test_a_control_share_is_ended_by_an_edit(migrated_url: str) -> None:
    """The block goes with it, and the method has all the traffic."""
    async with working(migrated_url) as worker:
        await worker.create(control=HALF)
        await worker.operator.patch(NAME, {"control": None}, 1, None, "enough", "tester")
        await worker.upkeep.follow()
        assert {a.bid for a in await played(worker, 30)} == {PRICE}
        assert (await worker.operator.state(NAME))["control"] is None
