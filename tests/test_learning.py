"""Value methods through the real stories: kin, allowance, forgetting, a detector, late values."""

from __future__ import annotations

import json
from typing import Any

import pytest

from service.errors import Malformed
from service.feedback import Report
from service.learner.memory import Memory, Prior
from service.store import learners, rebuilds
from service.teaching import FRESH, lesson
from tests.builders import CAP, NAME, UNIT, Worker, append, valued, won, working

pytestmark = pytest.mark.anyio

MS_A_DAY = 86_400_000
ACCRUING: dict[str, Any] = {"arrival": "accrues", "window_ms": 600_000}
THOMPSON = {"method": "thompson"}
PQ = {"method": "posterior-quantile", "order": 0.5}


def snapshot(worker: Worker, name: str = NAME) -> learners.Snapshot:
    """The published state."""
    return worker.database.read(lambda c: learners.snapshots(c, [name]))[name]


def memory(worker: Worker, name: str = NAME) -> Memory:
    """The published state, read."""
    return Memory.from_bytes(snapshot(worker, name).state)


def check_refolds(worker: Worker, name: str = NAME) -> None:
    """The published state is that of the whole stream, folded from zero."""
    again = worker.database.read(lambda c: rebuilds.fold_all(c, name, FRESH, lesson))
    assert again == snapshot(worker, name).state != FRESH


async def taught(worker: Worker, wins: int, hits: int, amount: int, name: str = NAME) -> None:
    """Let a line item learn from wins of which some brought so much."""
    rows = [
        entry
        for number in range(wins)
        for entry in (won(number), valued(number, amount if number < hits else 0))
    ]
    append(worker.database, *rows, name=name)
    await worker.learn()


async def patch(worker: Worker, version: int, **changes: Any) -> Any:
    """Change the line item as somebody who has seen this version."""
    return await worker.operator.patch(NAME, changes, version, None, None, "tester")


async def certainty(worker: Worker) -> dict[str, Any]:
    """What people see of certainty now."""
    shown: dict[str, Any] = (await worker.operator.state(NAME))["certainty"]
    return shown


async def test_kin_give_one_prior_lesson_that_a_refold_reads_again(migrated_url: str) -> None:
    """Journalled with its numbers; it moves the first bid, and a fold from zero is the same."""
    async with working(migrated_url) as worker:
        await worker.create(id="old", policy=THOMPSON)
        await taught(worker, 100, 10, 20_000_000, "old")
        await worker.create(policy=PQ)
        plain = await worker.bid()
        await worker.create(id="young", policy=PQ, kin=["old"])
        await worker.learn()
        assert memory(worker, "young").prior == Prior(2_000_000, 20_000_000)
        guided = await worker.bid("young")
        assert 0 < (guided.bid or 0) < (plain.bid or 0)
        [kind] = worker.column("SELECT kind FROM stream WHERE line_item = 'young' AND kind='prior'")
        assert kind == "prior"
        detail = json.loads(
            worker.one("SELECT detail FROM journal WHERE action = 'prior' AND line_item = 'young'")
        )
        assert detail["kin"] == ["old"]
        assert (detail["after"]["impressions"], detail["after"]["conversions"]) == (100.0, 10.0)
        check_refolds(worker, "young")


async def test_kin_that_learn_more_do_not_move_the_lesson(migrated_url: str) -> None:
    """It is one lesson of one moment; naming them again takes another."""
    async with working(migrated_url) as worker:
        await worker.create(id="old", policy=THOMPSON)
        await taught(worker, 100, 10, 20_000_000, "old")
        await worker.create(policy=PQ, kin=["old"])
        append(worker.database, won(1000), valued(1000, 80_000_000), name="old")
        await worker.learn()
        assert memory(worker).prior == Prior(2_000_000, 20_000_000)
        await patch(worker, 1, kin=None)
        await worker.learn()
        assert memory(worker).prior is None
        assert (await certainty(worker))["guess"]["from"] == "configuration"
        await patch(worker, 2, kin=["old"])
        await worker.learn()
        assert memory(worker).prior == Prior(round(280_000_000 / 101), round(280_000_000 / 11))
        assert (await certainty(worker))["guess"]["from"] == "kin"
        check_refolds(worker)


async def test_a_guess_of_ones_own_stands_over_that_of_kin(migrated_url: str) -> None:
    """An operator who says what to expect is not overruled by what was pooled before."""
    async with working(migrated_url) as worker:
        await worker.create(id="old", policy=THOMPSON)
        await taught(worker, 100, 10, 20_000_000, "old")
        await worker.create(policy=PQ, kin=["old"])
        await patch(worker, 1, value={"expected": {"per_impression": 6_000_000}})
        await worker.learn()
        assert (await certainty(worker))["guess"]["per_impression_nanos"] == 6_000_000
        check_refolds(worker)


@pytest.mark.parametrize(
    ("kin", "code"), [(["nobody"], "no_such_kin"), (["swiss"], "other_currency")]
)
async def test_kin_that_cannot_be_leave_nothing(
    migrated_url: str, kin: list[str], code: str
) -> None:
    """Neither a line item nor a change of one."""
    async with working(migrated_url) as worker:
        await worker.create(id="swiss", currency="CHF")
        with pytest.raises(Malformed) as refused:
            await worker.create(kin=kin)
        assert refused.value.code == code
        assert worker.column("SELECT id FROM line_item") == ["swiss"]


async def test_past_the_allowance_bids_keep_to_the_mean_and_say_so(migrated_url: str) -> None:
    """In the answer and in the state; earnings let go again."""
    async with working(migrated_url) as worker:
        await worker.create(policy={"method": "ucbid", "gamma": 3.0}, allowance=100_000_000)
        assert (await worker.bid()).set_by == "cap"
        await taught(worker, 200, 2, 20_000_000)
        held = await worker.bid()
        shown = await certainty(worker)
        assert held.set_by == shown["set_by"] == "allowance"
        mean = (20_000_000 + 2 * 20_000_000) / (5 + 200)
        assert held.bid == shown["bid_nanos"] == int(mean)
        assert shown["learning_cost_nanos"] == pytest.approx(200 * 10**6 - 200 * mean, abs=1)
        append(worker.database, *(valued(n, 80_000_000, "b", was=0) for n in range(100, 120)))
        await worker.learn()
        assert (await worker.bid()).set_by == "cap"
        check_refolds(worker)


async def test_many_values_corrections_and_parked_ones_are_one_value(migrated_url: str) -> None:
    """Of one impression, cut at the ceiling as a whole, and then drawn from."""
    async with working(migrated_url) as worker:
        await worker.create(policy=PQ, value=ACCRUING)
        for number in range(4):
            [answer] = await worker.bids(1)
            early = Report("value", ticket=answer.ticket, value=3, event_id="early")
            ref = answer.ref
            receipts = await worker.report(
                early,
                Report("won", ticket=answer.ticket, clearing=1),
                Report("value", ref=ref, value=60_000_000, event_id="a"),
                Report("value", ref=ref, value=60_000_000, event_id="b"),
                Report("value", ref=ref, value=10_000_000, event_id="c", corrects="b"),
            )
            assert [row.status for row in receipts] == ["parked", *["recorded"] * 4], number
        await worker.learn()
        total = memory(worker).total
        assert (total.converted, total.amount, total.clipped) == (4, 4 * 70_000_003, 0)
        assert total.values_seen == 12
        check_refolds(worker)
        await patch(worker, 1, policy=THOMPSON)
        await worker.learn()
        assert len({(await worker.bid()).bid for _ in range(9)}) > 3


async def test_windows_close_by_service_time_and_stand_still_in_silence(
    migrated_url: str,
) -> None:
    """A silent source keeps open wins open, and the first word lets time go on."""
    async with working(migrated_url) as worker:
        await worker.create(
            policy=PQ, value=ACCRUING, tripwires={"value_silence_ms": 60_000}, budget=10 * UNIT
        )
        answers = await worker.bids(10)
        await worker.report(*(Report("won", ticket=a.ticket, clearing=1) for a in answers))
        await worker.learn()
        worker.pass_service_ms(5 * 600_000)
        [later] = await worker.bids(1)
        await worker.learn()
        assert (await certainty(worker))["awaited"] == 10
        await worker.report(Report("value", ref=answers[0].ref, value=7, event_id="a"))
        await worker.learn()
        assert memory(worker).total.converted == 1
        worker.pass_service_ms(700_000)
        await worker.report(Report("lost", ticket=later.ticket))
        await worker.learn()
        assert memory(worker).total.known == 10
        check_refolds(worker)


@pytest.mark.parametrize("action", ["flag", "restart"])
async def test_a_change_of_rate_is_found_and_acted_on(migrated_url: str, action: str) -> None:
    """Flagged it is only shown; restarted, what came before is forgotten."""
    async with working(migrated_url) as worker:
        change = {"action": action, "ratio": 3.0, "threshold": 8.0}
        await worker.create(policy={"method": "kl-ucbid", "gamma": 1.01}, value={"change": change})
        for turn in range(40):
            worker.pass_service_ms(60_000)
            first = turn * 100
            hits = 10 if turn < 30 else 0
            rows = [
                entry
                for n in range(first, first + 50)
                for entry in (won(n), valued(n, 100_000_000 if n < first + hits else 0))
            ]
            append(worker.database, *rows)
        await worker.learn()
        shown, total = await certainty(worker), memory(worker).total
        assert shown["change"]["found"] == 1
        assert 400 < shown["change"]["last_began_ago_s"] < 800
        assert total.wins == 2000
        if action == "flag":
            assert (total.known, total.converted) == (2000, 300)
        else:
            assert total.converted == 0 < total.known <= 500
            assert "beginning afresh after an alarm" in shown["interval"]
        check_refolds(worker)


async def test_a_change_of_drift_refolds_and_back_again(migrated_url: str) -> None:
    """Nothing learnt is lost: taken back, the state is what it was, to the byte."""
    async with working(migrated_url) as worker:
        await worker.create(policy={"method": "ucbid", "gamma": 3.0})
        for turn in range(30):
            worker.pass_service_ms(60_000)
            rows = [e for n in range(10) for e in (won(turn * 10 + n), valued(turn * 10 + n, CAP))]
            append(worker.database, *rows)
        await worker.learn()
        before = memory(worker).total
        drift = {"how": "window", "rounds": None, "memory_ms": 300_000}
        await patch(worker, 1, value={"drift": drift})
        await worker.learn()
        shown = await certainty(worker)
        assert 50 <= shown["counted_as_known"] < 100
        assert memory(worker).total == before
        assert "forgetting the old" in shown["guarantee"]
        check_refolds(worker)
        await patch(worker, 2, value={"drift": None})
        await worker.learn()
        assert (await certainty(worker))["counted_as_known"] == 300
        check_refolds(worker)
