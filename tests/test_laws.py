"""Line items that bid by a law, through the real stories: tickets, weights, laws lost, refolds."""

from __future__ import annotations

import json
from typing import Any

import pytest
from sqlalchemy import text

from service.bidding import Answer
from service.feedback import Report
from service.learner.exptree_law import Law
from service.learner.exptree_state import Tree
from service.learner.memory import Memory
from service.learner.rules import tree_rules
from service.store import epochs, learners, rebuilds
from service.teaching import FRESH, lesson
from tests.builders import CAP, NAME, UNIT, Worker, working

pytestmark = pytest.mark.anyio

LAWFUL: dict[str, Any] = {
    "budget": 10 * UNIT,
    "losses": "priced",
    "value": {"ceiling": 40_000_000, "arrival": "accrues", "window_ms": 600_000},
}
METHODS = ["exptree", "exptree-win-only"]
LATER_MS = epochs.EPOCH_MS


async def create(worker: Worker, method: str = "exptree", **changes: Any) -> None:
    """A line item that bids by a law."""
    await worker.create(**{**LAWFUL, "policy": {"method": method}, **changes})


def outcome(answer: Answer, price: int) -> Report:
    """What comes of a bid against this competing bid."""
    assert answer.bid is not None
    if price < answer.bid:
        return Report("won", ticket=answer.ticket, clearing=price)
    return Report("lost", ticket=answer.ticket, to_win=price + 1)


def value(answer: Answer, amount: int, event: str = "a", **more: Any) -> Report:
    """A value of that bid's impression."""
    return Report("value", ref=answer.ref, value=amount, event_id=event, **more)


async def learn(worker: Worker) -> int:
    """End the epoch, fold what is new; the new snapshot."""
    worker.pass_service_ms(LATER_MS)
    await worker.learn()
    return snapshot(worker).seq


def snapshot(worker: Worker) -> learners.Snapshot:
    """The published state."""
    return worker.database.read(lambda c: learners.snapshots(c, [NAME]))[NAME]


def config(worker: Worker) -> dict[str, Any]:
    """The configuration as kept."""
    kept: dict[str, Any] = json.loads(worker.one("SELECT config FROM line_item"))
    return kept


def tree(worker: Worker) -> Tree:
    """The tree of the published state."""
    rules = tree_rules(config(worker))
    assert rules is not None
    return Tree.from_bytes(Memory.from_bytes(snapshot(worker).state).tree, rules)


def law(worker: Worker, seq: int) -> Law:
    """The law of that snapshot."""
    kept = worker.database.read(lambda c: epochs.laws(c, {(NAME, seq)})).get((NAME, seq))
    assert kept is not None
    return Law.from_bytes(kept)


def entries(worker: Worker, kind: str) -> list[dict[str, Any]]:
    """Bodies of a kind, in order."""
    query = "SELECT body FROM stream WHERE kind = :kind ORDER BY seq"
    return [json.loads(body) for body in worker.column(query, kind=kind)]


def check_refolds(worker: Worker) -> None:
    """The published state is that of the whole stream, folded from zero."""
    again = worker.database.read(lambda c: rebuilds.fold_all(c, NAME, FRESH, lesson))
    assert again == snapshot(worker).state != FRESH


async def winning(worker: Worker, price: int = 1) -> Answer:
    """A bid above this price, from as many as it takes; the others are lost."""
    for _ in range(200):
        [answer] = await worker.bids(1)
        if (answer.bid or 0) > price:
            return answer
        await worker.report(Report("lost", ticket=answer.ticket, to_win=price + 1))
    raise AssertionError("never above the price")


@pytest.mark.parametrize("method", METHODS)
async def test_every_outcome_carries_the_chance_of_its_own_law(
    migrated_url: str, method: str
) -> None:
    """Over four epochs; the state is that of a fold from zero, and bids move towards the worth."""
    async with working(migrated_url) as worker:
        await create(worker, method)
        for epoch in range(4):
            seq = snapshot(worker).seq
            answers = await worker.bids(10)
            assert {answer.snapshot for answer in answers} == {seq}
            prices = [(1 + number) * 700_000 for number in range(10)]
            before = {kind: len(entries(worker, kind)) for kind in ("won", "lost")}
            await worker.report(*map(outcome, answers, prices))
            drawn = law(worker, seq)
            for body in entries(worker, "won")[before["won"] :]:
                assert body["chance"] == drawn.chance_above(body["price"], 0)
                assert body["stage"] == list(drawn.stage)
            for body in entries(worker, "lost")[before["lost"] :]:
                assert body["stage"] == list(drawn.stage)
            assert await learn(worker) > seq, epoch
        check_refolds(worker)
        assert tree(worker).unweighed == 0
        wins, losses = (len(entries(worker, kind)) for kind in ("won", "lost"))
        assert tree(worker).lessons == (wins if method == METHODS[1] else wins + losses)


async def test_a_late_outcome_uses_the_law_of_its_own_epoch(migrated_url: str) -> None:
    """Two epochs on, the law has moved; the win is weighed by the one it was drawn from."""
    async with working(migrated_url) as worker:
        await create(worker)
        late = await winning(worker, CAP // 2)
        for _ in range(2):
            answers = await worker.bids(20)
            await worker.report(*(outcome(answer, CAP // 4) for answer in answers))
            await learn(worker)
        assert snapshot(worker).seq > (late.snapshot or 0)
        await worker.report(Report("won", ticket=late.ticket, clearing=CAP // 2))
        body = next(one for one in entries(worker, "won") if one["price"] == CAP // 2)
        mine, now = (law(worker, seq) for seq in (late.snapshot or 0, snapshot(worker).seq))
        assert body["chance"] == mine.chance_above(CAP // 2, 0)
        assert body["stage"] == list(mine.stage) != list(now.stage)
        await learn(worker)
        check_refolds(worker)


async def test_a_law_that_is_gone_teaches_nothing_and_is_counted(migrated_url: str) -> None:
    """Neither the win nor its value; money moves all the same, and the state shows it."""
    async with working(migrated_url) as worker:
        await create(worker)
        answer = await winning(worker)
        worker.run("DELETE FROM epoch")
        rows = await worker.report(
            Report("won", ticket=answer.ticket, clearing=1), value(answer, 10**7)
        )
        assert [row.status for row in rows] == ["recorded", "recorded"]
        assert "chance" not in entries(worker, "won")[-1]
        await learn(worker)
        grown = tree(worker)
        losses = len(entries(worker, "lost"))
        assert (grown.lessons, grown.unweighed) == (losses, 1)
        shown = (await worker.operator.state(NAME))["certainty"]
        assert shown["tree"]["outcomes_without_law_or_price"] == 1
        assert (shown["converted"], worker.balance()["spent"]) == (1, 1)
        check_refolds(worker)


async def test_a_ticket_of_before_a_restore_has_no_law(migrated_url: str) -> None:
    """The same snapshot may have had another law there, so its win is only counted."""
    async with working(migrated_url, incarnation=b"elsewher") as before:
        await create(before)
        answer = await winning(before)
    async with working(migrated_url, "two") as worker:
        [row] = await worker.report(Report("won", ticket=answer.ticket, clearing=1))
        assert row.status == "late"
        assert not {"chance", "stage"} & set(entries(worker, "won")[-1])
        await learn(worker)
        assert tree(worker).unweighed == 1


@pytest.mark.parametrize(("method", "conditional"), [(METHODS[0], True), (METHODS[1], False)])
async def test_a_floor_leaves_only_bids_above_it(
    migrated_url: str, method: str, conditional: bool
) -> None:
    """As published, passes under the floor are no rounds; of wins alone they are like losses."""
    async with working(migrated_url) as worker:
        await create(worker, method)
        answers = [await worker.bid(floor=CAP // 2) for _ in range(40)]
        reasons = {answer.reason for answer in answers}
        answer = next(one for one in answers if one.bid is not None)
        assert reasons == {None, "under_floor"}
        assert (answer.bid or 0) >= CAP // 2
        await worker.report(Report("won", ticket=answer.ticket, clearing=CAP // 2))
        body = entries(worker, "won")[-1]
        floor = CAP // 2 if conditional else 0
        assert body["chance"] == law(worker, answer.snapshot or 0).chance_above(CAP // 2, floor)
        assert (body["chance"] > 0.99) is conditional


async def test_a_loss_without_its_price_is_counted(migrated_url: str) -> None:
    """A feed that promised priced losses and sends a bare one costs that lesson only."""
    async with working(migrated_url) as worker:
        await create(worker)
        first, second = await worker.bids(2)
        await worker.report(Report("lost", ticket=first.ticket), outcome(second, CAP // 2))
        await learn(worker)
        assert (tree(worker).lessons, tree(worker).unweighed) == (1, 1)


@pytest.mark.parametrize("method", METHODS)
async def test_values_corrections_and_parked_values_reach_the_tree(
    migrated_url: str, method: str
) -> None:
    """Many events, one taken back, one before its win: as if the sum had come at once."""
    async with working(migrated_url) as worker:
        await create(worker, method)
        answer = await winning(worker)
        early = Report("value", ticket=answer.ticket, value=2_000_000, event_id="early")
        parked = await worker.report(early)
        assert [row.status for row in parked] == ["parked"]
        await worker.report(
            Report("won", ticket=answer.ticket, clearing=1),
            value(answer, 3_000_000, "a"),
            value(answer, 4_000_000, "b"),
        )
        await worker.report(value(answer, 1_000_000, "c", corrects="a"))
        await learn(worker)
        check_refolds(worker)
        memory = Memory.from_bytes(snapshot(worker).state)
        assert (memory.total.converted, memory.total.amount) == (1, 7_000_000)
        total = entries(worker, "value")[-1]
        assert (total["total_was"], total["was"]) == (9_000_000, 3_000_000)
        assert total["win"]["price"] == 1
        losses = len(entries(worker, "lost")) if method == METHODS[0] else 0
        assert tree(worker).lessons == 1 + losses


async def test_a_bill_that_comes_first_costs_no_value(migrated_url: str) -> None:
    """Values on the bill are known before the law is; the win brings both together."""
    async with working(migrated_url) as worker:
        await create(worker, spend_on="billed")
        answer = await winning(worker)
        await worker.report(Report("billed", ticket=answer.ticket, clearing=1))
        await worker.report(value(answer, 3_000_000), value(answer, 2_000_000, "b"))
        await worker.report(Report("won", ticket=answer.ticket, clearing=1))
        assert entries(worker, "won")[-1]["brought"] == 5_000_000
        assert ["win" in body for body in entries(worker, "value")] == [False, False]
        await learn(worker)
        check_refolds(worker)
        await worker.report(value(answer, 1_000_000, "c", corrects="b"))
        assert entries(worker, "value")[-1]["win"]["price"] == 1


@pytest.mark.parametrize("method", METHODS)
async def test_another_cap_refolds_under_other_ticks(migrated_url: str, method: str) -> None:
    """No bid leaves above the new cap, and tickets from between have no law to be mistaken for."""
    async with working(migrated_url) as worker:
        await create(worker, method)
        answers = await worker.bids(12)
        await worker.report(*(outcome(answer, 500_000) for answer in answers))
        before = await learn(worker)
        between = await winning(worker, CAP // 8)
        await worker.operator.patch(NAME, {"bid_cap": CAP // 4}, 1, None, None, "tester")
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "learner_halted"
        await worker.report(Report("won", ticket=between.ticket, clearing=CAP // 8))
        assert "chance" not in entries(worker, "won")[-1]
        await learn(worker)
        assert snapshot(worker).seq > before
        check_refolds(worker)
        assert all((answer.bid or 0) <= CAP // 4 for answer in await worker.bids(30))
        assert law(worker, snapshot(worker).seq).ticks.top == CAP // 4


async def test_a_cap_changed_before_any_lesson_gives_no_wrong_weight(migrated_url: str) -> None:
    """The first snapshot stands for the first law of any cap; its tickets must not be mixed up."""
    async with working(migrated_url) as worker:
        await create(worker)
        old = await winning(worker, CAP // 2)
        await worker.operator.patch(NAME, {"bid_cap": CAP // 4}, 1, None, None, "tester")
        await worker.upkeep.follow()
        new = await winning(worker)
        assert old.snapshot == new.snapshot == 0
        await worker.report(*(Report("won", ticket=one.ticket, clearing=1) for one in (old, new)))
        assert ["chance" in body for body in entries(worker, "won")] == [False, False]
        await learn(worker)
        assert law(worker, snapshot(worker).seq).ticks.top == CAP // 4
        check_refolds(worker)


async def test_a_method_can_be_changed_both_ways(migrated_url: str) -> None:
    """To a law and back, with a refold each time, and bids in between."""
    async with working(migrated_url) as worker:
        await worker.create(**{**LAWFUL, "policy": {"method": "ucbid"}})
        for version, method in enumerate([METHODS[0], "bernstein-ucbid", METHODS[1]], start=1):
            answers = await worker.bids(5)
            await worker.report(*(outcome(answer, 500_000) for answer in answers))
            policy = {"policy": {"method": method}}
            await worker.operator.patch(NAME, policy, version, None, None, "tester")
            await learn(worker)
            check_refolds(worker)
            assert (await worker.bid()).method == method


async def test_a_reset_forgets_the_tree_and_what_its_tickets_still_bring(
    migrated_url: str,
) -> None:
    """A win of before teaches nothing after, and does not age the fresh tree."""
    async with working(migrated_url) as worker:
        await create(worker)
        for _ in range(3):
            answers = await worker.bids(20)
            await worker.report(*(outcome(answer, CAP // 4) for answer in answers))
            await learn(worker)
        old = await winning(worker)
        await worker.operator.reset(NAME, "a test", "tester")
        await learn(worker)
        await worker.report(Report("won", ticket=old.ticket, clearing=1), value(old, 10**7))
        await learn(worker)
        grown = tree(worker)
        assert (grown.lessons, grown.unweighed, grown.steps) == (0, 1, ())
        assert grown.stage == (1, 0)
        check_refolds(worker)


async def test_old_laws_are_pruned_and_the_audit_stays_content(migrated_url: str) -> None:
    """After grace and slack only the published snapshot has a law."""
    async with working(migrated_url) as worker:
        await create(worker)
        for _ in range(3):
            answers = await worker.bids(3)
            await worker.report(*(outcome(answer, CAP // 2) for answer in answers))
            await learn(worker)
        assert worker.one("SELECT count(*) FROM epoch") == 4
        worker.pass_service_ms(900_000 + epochs.SLACK_MS + 1)
        await worker.clerk.prune()
        assert worker.column("SELECT snapshot FROM epoch") == [snapshot(worker).seq]
        assert worker.audit() == []


async def test_the_state_of_a_law_is_one_answer_for_people(migrated_url: str) -> None:
    """Median and spread of the draws, and its bound with the numbers put in."""
    async with working(migrated_url) as worker:
        await create(worker, METHODS[1])
        answers = await worker.bids(10)
        await worker.report(*(outcome(answer, CAP // 2) for answer in answers))
        await learn(worker)
        shown = await worker.operator.state(NAME)
        assert 0 < shown["bid"]["price_cpm_nanos"] <= CAP
        assert "Our own derivation, not reviewed" in shown["certainty"]["guarantee"]
        assert "not published" in shown["certainty"]["source"]
        rounds = worker.database.read(
            lambda c: c.execute(text("SELECT count(*) FROM stream WHERE slot = 'result'")).scalar()
        )
        assert shown["learner"]["rounds"] == rounds == 10
