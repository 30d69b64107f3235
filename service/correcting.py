"""Orders with authority over money and its end: reverse, reconcile after a restore, close.

Each is an entry of its own in the stream; nothing that was booked is ever edited.
"""

from __future__ import annotations

from typing import Any

from service.errors import Conflict, Malformed
from service.guard.ticket import BadTicket, bid_of
from service.ledger.accounts import Account
from service.ledger.corrections import reconciled, reversal
from service.ledger.entries import Entry
from service.money import nanos_text
from service.ordering import Orders, repeat_of
from service.store import changes, costs, freezes, line_items
from service.store.books import Books
from service.store.costs import REVERSAL, Cost
from service.store.database import Writing

RESTORE, CLOSED = "restore", "closed"


class Correcting:
    """Obeys those who may correct money, for one worker."""

    def __init__(self, orders: Orders) -> None:
        self._orders = orders

    async def reverse(
        self,
        line_item: str,
        amount: int,
        ref: str | None,
        reason: str,
        actor: str,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """
        Book a refund: spend falls by `amount` nanos, once per ref.

        Raises:
            Malformed: The ref is of no bid that has cost anything.
            Conflict: More than was spent, or than the bid has cost.
        """
        bid = None if ref is None else _bid(ref)

        def order(connection: Writing) -> dict[str, Any]:
            row = line_items.one(connection, line_item)
            # Locked before the cost is read, or two refunds of a bid would both find it untouched.
            books = Books(connection, [line_item], self._orders.database.wall_ms())
            before = books.accounts[line_item]
            cost = None if bid is None else costs.cost_of(connection, line_item, bid)
            # Callers without an Idempotency-Key are safe too: the ref itself allows one refund.
            if bid is not None and _reversed_already(cost, amount):
                return {**_moved(line_item, before, before), "duplicate": True}
            # A ticket without a slice may have found no day to count on, so its refund lowers none.
            day = cost.day if cost is not None and cost.slice is not None else None
            if day is not None:
                books.load_days([(line_item, day)])
            movement = reversal(before, books.days.get((line_item, day or "")), amount)
            place = {"day": day, "slice": cost.slice if cost else None}
            body = {"amount": amount, **place, "actor": actor, "reason": reason}
            # Unique in the stream, so the table itself keeps out a second refund of a bid.
            slot = None if bid is None else REVERSAL
            books.post(line_item, Entry(REVERSAL, body, bid, slot, amount), movement, day=day)
            books.save()
            answer = _moved(line_item, before, books.accounts[line_item])
            self._orders.note(connection, actor, "reverse", row.id, reason, answer)
            changes.announce(connection, "money", [line_item])
            return answer

        call = {"call": "reverse", "line_item": line_item, "amount": amount, "ref": ref}
        call["reason"] = reason
        return await self._orders.give(order, repeat_of(actor, idempotency, call))

    async def reconcile(
        self,
        line_item: str,
        spent: int,
        reason: str,
        actor: str,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """
        Confirm what was spent by the books of those who were paid; then the line item may bid.

        Raises:
            Conflict: It does not wait for that, or less is confirmed than is booked.
        """

        def order(connection: Writing) -> dict[str, Any]:
            row = line_items.one(connection, line_item)
            now = self._orders.database.wall_ms()
            books = Books(connection, [line_item], now)
            if not freezes.lift(connection, line_item, [RESTORE], wall_ms=now):
                detail = "This line item waits for nobody to confirm its spend."
                raise Conflict("nothing_to_reconcile", detail)
            before = books.accounts[line_item]
            movement = reconciled(before, spent)
            body = {"spent": spent, "actor": actor, "reason": reason}
            books.post(line_item, Entry("reconcile", body, cost=movement.cost), movement)
            books.save()
            # Confirmed spend beyond the budget is like a late win: kept apart, and it freezes.
            if movement.unfunded:
                why = f"{nanos_text(movement.unfunded)} confirmed spend found no free money"
                freezes.put(
                    connection, line_item, "tripwire", wall_ms=now, actor="bidkeel", reason=why
                )
            answer = _moved(line_item, before, books.accounts[line_item])
            self._orders.note(connection, actor, "reconcile", line_item, reason, answer)
            stopped = self._orders.stopped(
                connection, "thaw", line_item, row.freezes, reason, actor
            )
            return {**answer, "freezes": stopped["after"]}

        call = {"call": "reconcile", "line_item": line_item, "spent": spent, "reason": reason}
        return await self._orders.give(order, repeat_of(actor, idempotency, call))

    async def close(
        self, line_item: str, reason: str, actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """End a line item: no new money is leased, open bids still settle."""

        def order(connection: Writing) -> dict[str, Any]:
            row = line_items.one(connection, line_item)
            now = self._orders.database.wall_ms()
            books = Books(connection, [line_item], now)
            fresh = freezes.put(
                connection, line_item, CLOSED, wall_ms=now, actor=actor, reason=reason
            )
            # Said once: a second close would tell the stream nothing new.
            if fresh:
                books.post(line_item, Entry(CLOSED, {"actor": actor, "reason": reason}))
                books.save()
            money = _money(books.accounts[line_item])
            stopped = self._orders.stopped(
                connection, "close", line_item, row.freezes, reason, actor
            )
            return {**stopped, "money": money}

        call = {"call": "close", "line_item": line_item, "reason": reason}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        return await self._orders.in_force(answer)


def _bid(ref: str) -> bytes:
    try:
        return bid_of(ref)
    except BadTicket as error:
        raise Malformed("bad_ref", "The ref is not of the form that bids carry.") from error


def _reversed_already(cost: Cost | None, amount: int) -> bool:
    """
    Whether this very refund is booked.

    Raises:
        Malformed: The bid has cost nothing here.
        Conflict: Another amount was taken back, or it is more than the bid has cost.
    """
    if cost is None:
        raise Malformed("no_such_ref", "This line item has booked no cost for this ref.")
    if cost.reversed is not None and cost.reversed != amount:
        detail = f"{nanos_text(cost.reversed)} was taken back for this ref already."
        raise Conflict("reversed_already", detail)
    if amount > cost.booked:
        detail = f"This ref has cost {nanos_text(cost.booked)}; no more can be taken back."
        raise Conflict("reversal_above_cost", detail, {"cost": nanos_text(cost.booked)})
    return cost.reversed == amount


def _money(account: Account) -> dict[str, int]:
    return {
        "budget_nanos": account.budget,
        "spent_nanos": account.spent,
        "held_nanos": account.held,
        "unfunded_nanos": account.unfunded,
        "disputed_nanos": account.disputed,
    }


def _moved(line_item: str, before: Account, after: Account) -> dict[str, Any]:
    return {"line_item": line_item, "before": _money(before), "after": _money(after)}
