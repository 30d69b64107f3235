"""Refunds, reconciling and closing over a real database: money moves by entries, never by edits."""

from __future__ import annotations

from typing import Any

import pytest

from service.errors import Conflict, Malformed
from service.feedback import Report
from service.ledger.accounts import Account, Day, Movement
from service.ledger.corrections import reconciled, reversal
from service.store import audit, freezes
from tests.builders import GRACE_MS, NAME, PRICE, UNIT, Worker, working

pytestmark = pytest.mark.anyio


async def wins(worker: Worker, count: int = 3) -> list[Any]:
    """So many wins at the price of the bid."""
    bids = await worker.bids(count)
    await worker.report(*(Report("won", bid.ticket, clearing=PRICE) for bid in bids))
    return bids


async def reverse(worker: Worker, amount: int, ref: str | None = None, **more: Any) -> Any:
    """Reverse as an operator."""
    return await worker.operator.correcting.reverse(NAME, amount, ref, "a refund", "tester", **more)


def account(**sums: int) -> Account:
    """An account of a hundred with these sums."""
    start = {"budget": 100, "target": 100, "spent": 0, "held": 0, "unfunded": 0, "disputed": 0}
    return Account("a", **{**start, **sums}, seq=0, at_ms=0)


def test_a_refund_first_pays_what_found_no_money() -> None:
    """Debt is the oldest; then spend falls, and its day with it, the part above its limit first."""
    day = Day("a", "2026-12-01", 100, 100, 5, 0, 3)
    moved = reversal(account(spent=50, unfunded=4), day, 10)
    assert moved == Movement(spent=-6, unfunded=-4, day_spent=-3, day_over_spent=-3)
    assert reversal(account(spent=50), None, 50) == Movement(spent=-50)
    with pytest.raises(Conflict, match="spent"):
        reversal(account(spent=5, unfunded=1), None, 7)


def test_what_a_restore_forgot_is_booked_never_above_the_budget() -> None:
    """The rest is unfunded; less than is booked is no reconciling."""
    assert reconciled(account(spent=10, held=60), 35) == Movement(spent=25)
    assert reconciled(account(spent=10, held=60), 45) == Movement(spent=30, unfunded=5)
    assert reconciled(account(spent=10, unfunded=2), 12) == Movement()
    with pytest.raises(Conflict, match="booked"):
        reconciled(account(spent=10), 9)


async def test_a_refund_lowers_spend_and_its_day_once(migrated_url: str) -> None:
    """The audit counts it, the repeat is a duplicate, another amount a conflict."""
    async with working(migrated_url) as worker:
        await worker.create(daily_budget=UNIT)
        bids = await wins(worker)
        told = await reverse(worker, PRICE // 2, bids[0].ref)
        spent = (told["before"]["spent_nanos"], told["after"]["spent_nanos"])
        assert spent == (3 * PRICE, 3 * PRICE - PRICE // 2)
        assert worker.one("SELECT spent FROM local_day") == 3 * PRICE - PRICE // 2
        again = await reverse(worker, PRICE // 2, bids[0].ref)
        assert again["duplicate"]
        assert again["after"] == told["after"]
        with pytest.raises(Conflict, match="already"):
            await reverse(worker, PRICE // 4, bids[0].ref)
        with pytest.raises(Conflict, match="no more"):
            await reverse(worker, PRICE + 1, bids[1].ref)
        assert worker.audit() == []
        assert worker.one("SELECT reason FROM journal WHERE action = 'reverse'") == "a refund"


async def test_a_refund_without_a_ref_repeats_by_its_key(migrated_url: str) -> None:
    """A credit note over many wins; never more than was spent."""
    async with working(migrated_url) as worker:
        await worker.create()
        await wins(worker)
        first = await reverse(worker, PRICE, idempotency="k")
        assert await reverse(worker, PRICE, idempotency="k") == first
        assert worker.balance()["spent"] == 2 * PRICE
        with pytest.raises(Conflict):
            await reverse(worker, 2 * PRICE + 1)
        await reverse(worker, 2 * PRICE)
        assert (worker.balance()["spent"], worker.audit()) == (0, [])


async def test_a_refund_of_debt_lowers_no_spend(migrated_url: str) -> None:
    """What found no money is taken back first; the stream replayed says the same."""
    async with working(migrated_url) as worker:
        await worker.create(budget=8 * PRICE, daily_budget=8 * PRICE)
        bids = await worker.bids(4)
        await worker.upkeep.give_back()
        worker.pass_service_ms(GRACE_MS + 60_000)
        await worker.keep_time()
        changed = {"budget": PRICE, "bid_cap": PRICE}
        await worker.operator.patch(NAME, changed, 1, None, "a try", "tester")
        for bid in bids:
            await worker.report(Report("won", bid.ticket, clearing=PRICE))
        money = worker.balance()
        assert (money["spent"], money["unfunded"]) == (PRICE, 3 * PRICE)
        await reverse(worker, PRICE, bids[3].ref)
        await reverse(worker, PRICE * 5 // 2)
        money = worker.balance()
        assert (money["spent"], money["unfunded"]) == (PRICE // 2, 0)
        assert worker.audit() == []
        await reverse(worker, PRICE // 2, bids[0].ref)
        assert (worker.balance()["spent"], worker.audit()) == (0, [])


async def test_only_a_bid_that_cost_something_is_refunded(migrated_url: str) -> None:
    """No ref, a ref of nobody, a bid that lost."""
    async with working(migrated_url) as worker:
        await worker.create()
        (bid,) = await worker.bids(1)
        await worker.report(Report("lost", bid.ticket))
        for ref in ("x", bid.ref, "A" * 22):
            with pytest.raises(Malformed):
                await reverse(worker, 1, ref)
        assert worker.audit() == []


async def test_a_refund_that_the_ledger_forgot_is_found(migrated_url: str) -> None:
    """Spend that fell without its entry, and an entry without its fall, both break V3."""
    async with working(migrated_url) as worker:
        await worker.create()
        await wins(worker)
        await reverse(worker, PRICE)
        worker.run("UPDATE balance SET spent = spent - 1")
        assert {f.check[:2] for f in worker.audit()} == {"V3", "V7"}
        worker.run("UPDATE balance SET spent = spent + 1")
        worker.run("UPDATE stream SET cost = cost + 1 WHERE kind = 'reversal'")
        assert {f.check[:2] for f in worker.audit()} == {"V3"}


async def test_a_refund_may_be_spent_again(migrated_url: str) -> None:
    """The freed money is leased like any other, and no more than it."""
    async with working(migrated_url) as worker:
        await worker.create(budget=8 * PRICE)
        bids = await wins(worker, 8)
        assert (await worker.bid()).reason is not None
        await reverse(worker, PRICE, bids[0].ref)
        await worker.upkeep.follow()
        assert (await worker.bid()).bid == PRICE
        assert (await worker.bid()).bid is None
        assert worker.audit() == []


async def test_a_closed_line_item_settles_and_leases_no_more(migrated_url: str) -> None:
    """Open bids win as before; thawing does not open it; the state says closed."""
    async with working(migrated_url) as worker:
        await worker.create()
        bids = await worker.bids(3)
        told = await worker.operator.correcting.close(NAME, "the season is over", "tester")
        assert [freeze["source"] for freeze in told["after"]] == ["closed"]
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "frozen"
        assert (await worker.operator.state(NAME))["status"] == "closed"
        thawed = await worker.operator.thaw(NAME, "a try", "tester")
        assert [freeze["source"] for freeze in thawed["after"]] == ["closed"]
        receipts = await worker.report(
            Report("won", bids[0].ticket, clearing=PRICE), Report("lost", bids[1].ticket)
        )
        assert [receipt.status for receipt in receipts] == ["recorded", "recorded"]
        await worker.upkeep.give_back()
        worker.pass_service_ms(GRACE_MS + 60_000)
        await worker.keep_time()
        assert (worker.balance()["held"], worker.balance()["spent"]) == (0, PRICE)
        again = await worker.operator.correcting.close(NAME, "again", "tester")
        assert again["before"] == again["after"]
        assert worker.column("SELECT kind FROM stream WHERE kind = 'closed'") == ["closed"]
        assert worker.audit() == []


async def test_a_worker_that_has_not_heard_leases_nothing_of_a_closed_one(
    migrated_url: str,
) -> None:
    """The lease itself is refused, so closing need not wait for anybody."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.catalog.look_up(NAME)
        worker.database.write(
            lambda c: freezes.put(c, NAME, "closed", wall_ms=1, actor="a", reason="r")
        )
        assert (await worker.bid()).reason == "frozen"
        assert worker.one("SELECT count(*) FROM slice") == 0


async def test_spend_is_confirmed_after_a_restore(migrated_url: str) -> None:
    """Until then nothing is leased; the missing part is an entry, what is too much unfunded."""
    async with working(migrated_url) as worker:
        await worker.create()
        await wins(worker)
        await worker.stop()

        async def confirm(spent: int) -> Any:
            return await worker.operator.correcting.reconcile(NAME, spent, "books", "tester")

        with pytest.raises(Conflict, match="nobody"):
            await confirm(5 * PRICE)
        for spent, unfunded in ((5 * PRICE, 0), (UNIT + 7, 7)):
            worker.database.write(
                lambda c: freezes.put(c, NAME, "restore", wall_ms=1, actor="a", reason="r")
            )
            await worker.upkeep.follow()
            assert (await worker.operator.state(NAME))["status"] == "reconcile"
            told = await confirm(spent)
            assert told["after"]["spent_nanos"] + unfunded == spent
            assert worker.balance()["unfunded"] == unfunded
            assert worker.audit() == []
        assert worker.column("SELECT source FROM freezing") == ["tripwire"]
        assert worker.database.read(audit.unfunded) == 7
