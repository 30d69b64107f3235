"""Hindsight over a real database: what log and stream tell of a bid, and what they leave out."""

from __future__ import annotations

import asyncio
from typing import Any

import pytest

from service.errors import Malformed, NotFound, Overloaded
from service.feedback import Report
from service.hindsights import ROWS_HERE_MAX, WAITING_MAX, Question
from service.winding import Retraction
from tests.builders import CAP, NAME, PRICE, UNIT, Worker, working

pytestmark = pytest.mark.anyio

VALUE = 10_000_000
CLEARING = PRICE // 2


async def look(worker: Worker, kind: Any = "flat", price: int = PRICE, **more: Any) -> Any:
    """Ask once what was decided is logged."""
    await worker.upkeep.log()
    return await worker.operator.hindsights.look(NAME, Question(kind, price, **more))


async def play(worker: Worker) -> list[Any]:
    """Four bids: one won and worth something, one won and silent, one lost, one without word."""
    answers = await worker.bids(4)
    one, two, three, _ = answers
    await worker.report(
        Report("won", one.ticket, clearing=CLEARING),
        Report("value", one.ticket, value=VALUE, event_id="e"),
        Report("won", two.ticket, clearing=CLEARING),
        Report("lost", three.ticket),
    )
    return answers


async def test_what_is_known_of_each_bid_is_counted(migrated_url: str) -> None:
    """At half a nano above the clearing price both wins stay, and only silence is bounded."""
    async with working(migrated_url) as worker:
        await worker.create()
        await play(worker)
        await worker.bid(test=True)
        await worker.bid(floor=CAP)
        found = await look(worker, price=CLEARING + 1)
        sure = found["without_model"]
        assert found["log"] == {
            **{"auctions": 5, "passes_that_no_price_would_have_changed": 0},
            **{"bids_without_word": 1, "wins_whose_value_is_still_open": 1},
            **{"retracted": 0, "late_values": 0, "contradicted": 0, "test_bids": 1},
        }
        # The pass under the floor stays one at this price, so it is exact too.
        assert sure["exact"]["auctions"] == 4
        assert sure["exact"]["surplus_nanos"] == VALUE - CLEARING
        assert sure["bounded"]["auctions"] == 1
        ceiling = 100_000_000
        open_low, silent_low = -CLEARING, -(CLEARING + 1)
        assert sure["surplus"] == {
            "low_nanos": VALUE - CLEARING + open_low + silent_low,
            "high_nanos": VALUE - CLEARING + ceiling - CLEARING + ceiling,
        }
        assert sure["wins"] == {"low": 2, "high": 3}
        assert found["alternative"] == {"kind": "flat", "price_cpm_nanos": CLEARING + 1}


async def test_retracted_words_are_not_believed_and_named(migrated_url: str) -> None:
    """An outcome taken back may have been anything; the money of the log stays what it was."""
    async with working(migrated_url) as worker:
        await worker.create()
        one, *_ = await play(worker)
        before = await look(worker)
        wish = Retraction("both", refs=(one.ref,))
        await worker.operator.winding.retract(NAME, wish, "wrong", "tester", preview=False)
        after = await look(worker)
        assert after["log"]["retracted"] == 1
        assert after["log"]["bids_without_word"] == before["log"]["bids_without_word"] + 1
        for end, sign in (("low_nanos", 1), ("high_nanos", -1)):
            ends = [found["without_model"]["surplus"][end] for found in (before, after)]
            assert sign * ends[1] < sign * ends[0]


async def test_two_words_of_one_auction_are_both_doubted(migrated_url: str) -> None:
    """Lost and then won: booked late, and bounded here, since one of the two is wrong."""
    async with working(migrated_url) as worker:
        await worker.create()
        (one,) = await worker.bids(1)
        await worker.report(Report("lost", one.ticket))
        await worker.report(Report("won", one.ticket, clearing=CLEARING))
        found = await look(worker)
        assert found["log"]["contradicted"] == found["log"]["bids_without_word"] == 1
        assert found["without_model"]["bounded"]["auctions"] == 1


async def test_values_after_the_window_count_for_nothing_and_are_named(
    migrated_url: str,
) -> None:
    """As they teach nothing; and once the window has closed nothing is open."""
    async with working(migrated_url) as worker:
        await worker.create(value={"arrival": "accrues"})
        (one,) = await worker.bids(1)
        await worker.report(Report("won", one.ticket, clearing=CLEARING))
        worker.pass_service_ms(60_001)
        await worker.report(Report("value", ref=one.ref, value=VALUE, event_id="late"))
        found = await look(worker)
        assert found["log"]["late_values"] == 1
        assert found["log"]["wins_whose_value_is_still_open"] == 0
        surplus = found["without_model"]["surplus"]
        assert surplus == {"low_nanos": -CLEARING, "high_nanos": -CLEARING}


@pytest.mark.parametrize(("silence_ms", "still_open"), [(50_000, 1), (70_000, 0), (None, 0)])
async def test_windows_stand_still_while_values_are_silent(
    migrated_url: str, silence_ms: int | None, still_open: int
) -> None:
    """As the learner keeps them open, hindsight does: a silent source proves nothing worthless."""
    async with working(migrated_url) as worker:
        tripwires = {"value_silence_ms": silence_ms}
        await worker.create(value={"arrival": "accrues"}, tripwires=tripwires)
        (one,) = await worker.bids(1)
        await worker.report(Report("won", one.ticket, clearing=CLEARING))
        await worker.learn()
        worker.pass_service_ms(60_001)
        found = await look(worker)
        assert found["log"]["wins_whose_value_is_still_open"] == still_open


async def test_an_alternative_without_enough_money_is_not_believed_to_go_on(
    migrated_url: str,
) -> None:
    """Three bids at the cap may cost more than there is; lines under assumptions are refused."""
    async with working(migrated_url) as worker:
        await worker.create(budget=2 * CAP)
        for _ in range(3):
            (one,) = await worker.bids(1)
            await worker.report(Report("lost", one.ticket))
        found = await look(worker, price=CAP)
        assert found["budget"]["left_at_start_nanos"] == 2 * CAP
        assert found["budget"]["auctions_after_it_may_have_ended"] == 1
        assert [line["code"] for line in found["assumed"]] == ["budget_may_end"] * 2


async def test_a_span_leaves_out_what_lies_beside_it(migrated_url: str) -> None:
    """Found by halves in the log; an empty span is refused, one without bids is empty."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(5)
        await worker.upkeep.log()
        worker.run("UPDATE decision SET at_ms = 1000000 * number, test = 0")
        found = await look(worker, from_ms=2_000_000, until_ms=4_000_000)
        assert found["log"]["auctions"] == 2
        empty = await look(worker, from_ms=9_000_000, until_ms=9_000_001)
        assert empty["without_model"]["exact"]["share"] is None
        assert empty["log"]["auctions"] == 0
        with pytest.raises(Malformed):
            await look(worker, from_ms=5, until_ms=5)


async def test_money_spent_before_the_span_is_not_there_for_it(migrated_url: str) -> None:
    """What earlier wins cost is taken off, to the nano."""
    async with working(migrated_url) as worker:
        await worker.create()
        await play(worker)
        worker.run("UPDATE stream SET at_ms = 1000 * seq")
        whole = await look(worker, from_ms=1, until_ms=2)
        later = await look(worker, from_ms=10**9, until_ms=10**9 + 1)
        assert whole["budget"]["left_at_start_nanos"] == UNIT
        assert later["budget"]["left_at_start_nanos"] == UNIT - 2 * CLEARING


async def test_the_control_arm_answers_for_its_price(migrated_url: str) -> None:
    """Drawn by a keyed hash with a chance that was kept: estimates, beside the bounds."""
    plain = PRICE // 2
    async with working(migrated_url) as worker:
        control = {"share": 5 * 10**8, "method": "flat", "price": plain}
        await worker.create(control=control, value={"arrival": "once"})
        answers = [await worker.bid(request_id=f"op-{n}") for n in range(120)]
        await worker.report(*(Report("lost", answer.ticket) for answer in answers))
        found = await look(worker, price=plain)
        labels = [line["label"] for line in found["drawn"]]
        assert labels == ["ips", "snips", "dr"]
        assert found["drawn"][0]["effective_auctions"] >= 30
        other = await look(worker, price=plain + 1)
        assert [line["code"] for line in other["drawn"]] == ["bids_not_drawn"]


async def test_what_makes_no_sense_is_refused(migrated_url: str) -> None:
    """A price above the cap, a method nobody knows, another cap for a law, no line item."""
    async with working(migrated_url) as worker:
        await worker.create(policy={"method": "exptree-win-only"})
        for kind, price, code in (
            ("flat", CAP + 1, "bad_field"),
            ("cap", CAP // 2, "cap_moves_the_law"),
        ):
            with pytest.raises(Malformed) as caught:
                await look(worker, kind, price)
            assert caught.value.code == code
        with pytest.raises(Malformed):
            await look(worker, "method", 0, method="luck")
        found = await look(worker, "method", 0, method="kl-ucbid")
        assert found["alternative"] == {"kind": "method", "method": "kl-ucbid"}
        with pytest.raises(NotFound):
            await worker.operator.hindsights.look("meadow", Question("flat", PRICE))


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_long_log_is_worked_out_in_another_process(migrated_url: str) -> None:
    """Page by page, and with the same answer as a thread gives."""
    async with working(migrated_url, queue_max=10_000) as worker:
        await worker.create()
        await play(worker)
        await worker.upkeep.log()
        few = await look(worker)
        worker.run(
            "WITH RECURSIVE n(k) AS (SELECT 1 UNION ALL SELECT k + 1 FROM n WHERE k < :many)"
            " INSERT INTO decision (at_ms, line_item, source, floor, snapshot, test, reason)"
            " SELECT d.at_ms, d.line_item, 'x', 0, 0, 0, 'frozen' FROM n, decision d"
            " WHERE d.number = 1",
            many=ROWS_HERE_MAX,
        )
        many = await look(worker)
        assert many["log"]["passes_that_no_price_would_have_changed"] == ROWS_HERE_MAX
        assert many["without_model"] == few["without_model"]


async def test_evidence_gives_reasons_and_no_order_of_merit(migrated_url: str) -> None:
    """What fits by the feedback seen; in the order of names, and nothing is changed by it."""
    async with working(migrated_url) as worker:
        await worker.create()
        answers = await worker.bids(25)
        await worker.report(*(Report("lost", a.ticket, to_win=2 * PRICE) for a in answers))
        await worker.learn()
        found = await worker.operator.hindsights.evidence(NAME)
        assert found["feedback"]["losses_are_priced"] is True
        names = [one["method"] for one in found["methods"]]
        assert names == sorted(names)
        by_name = {one["method"]: one for one in found["methods"]}
        assert by_name["exptree"]["fits"]
        assert any('losses: "priced"' in said for said in by_name["exptree"]["reasons"])
        assert by_name["flat"]["learning_cost"]["at_most_nanos"] == 0
        assert by_name["ucbid"]["learning_cost"]["wins"] > 0
        assert "never applied by itself" in found["says"]
        assert (await worker.operator.get(NAME)).version == 1


async def test_only_so_many_may_ask_at_once(migrated_url: str) -> None:
    """One is answered at a time, and a crowd is turned away."""
    async with working(migrated_url) as worker:
        await worker.create()
        asked = (look(worker) for _ in range(WAITING_MAX + 1))
        answers = await asyncio.gather(*asked, return_exceptions=True)
        assert sum(isinstance(one, Overloaded) for one in answers) == 1
        assert sum(isinstance(one, dict) for one in answers) == WAITING_MAX
        assert (await look(worker))["log"]["auctions"] == 0
