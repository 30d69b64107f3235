"""Orders about what was set aside: look at it, try it again, let it go.

Apart from feedback and teaching, which only ever add to the quarantine.
"""

from __future__ import annotations

from typing import Any

from service.errors import BrokenPromise
from service.ledger.cancelling import ALL
from service.ledger.entries import Entry
from service.ordering import Orders
from service.store import lessons, line_items, outcomes, quarantines, rebuilds
from service.store.books import Books
from service.store.database import Reading, Writing
from service.teaching import FRESH, POISON, weigh
from service.winding import Winding

NEWEST = 2**62


class Quarantining:
    """Shows and empties the quarantine, for one worker."""

    def __init__(self, orders: Orders, winding: Winding) -> None:
        self._orders, self._winding = orders, winding

    async def list(self, line_item: str, before: int | None, limit: int) -> list[dict[str, Any]]:
        """
        What was set aside, newest first.

        Raises:
            NotFound: There is no such line item.
        """

        def work(connection: Reading) -> list[dict[str, Any]]:
            line_items.one(connection, line_item)
            return quarantines.page(connection, line_item, before or NEWEST, limit)

        return [_shown(row) for row in await self._orders.read(work)]

    async def retry(self, line_item: str, number: int, reason: str, actor: str) -> dict[str, Any]:
        """
        Book an outcome after all, or let a lesson teach after all.

        Raises:
            NotFound, Conflict: No such row, or it is dealt with.
        """
        row = await self._orders.read(lambda c: quarantines.waiting(c, line_item, number))
        if row["seq"] is None:
            return await self._book(row, reason, actor)

        def order(connection: Writing) -> dict[str, Any]:
            books = Books(connection, [line_item], self._orders.database.wall_ms())
            # Looked at again under the lock: two people may have pressed the same button.
            found = quarantines.waiting(connection, line_item, number)
            quarantines.mark(connection, number, "retried")
            body = {"entry": found["seq"], "back": True, "actor": actor, "reason": reason}
            books.post(line_item, Entry("quarantine", body))
            books.save()
            lessons.uncancel(connection, line_item, found["seq"])
            self._orders.note(connection, actor, "retry", line_item, reason, body)
            span = (found["seq"], found["seq"], ALL)
            rebuilds.put_back(connection, line_item, [span], FRESH)
            return {"number": number, "seq": found["seq"], "status": "taught_again"}

        answer = await self._orders.give(order, None)
        return await self._winding.published(line_item, answer)

    async def release(self, line_item: str, number: int, reason: str, actor: str) -> dict[str, Any]:
        """Let a row go: it is not booked and not taught, and counts no more."""

        def order(connection: Writing) -> dict[str, Any]:
            row = quarantines.waiting(connection, line_item, number)
            quarantines.mark(connection, number, "released")
            detail = {"number": number, "error": row["error"], "body": row["body"]}
            self._orders.note(connection, actor, "release", line_item, reason, detail)
            return {"number": number, "status": "released"}

        return await self._orders.give(order, None)

    async def _book(self, row: dict[str, Any], reason: str, actor: str) -> dict[str, Any]:
        name, number = row["line_item"], row["number"]
        try:
            booking = quarantines.booking_of(name, row["body"])
            booked = await self._orders.threads.run(
                outcomes.book, self._orders.database, [booking], weigh
            )
        except (BrokenPromise, *POISON) as error:
            said = f"{type(error).__name__}: {error}"
            return {"number": number, "status": "failed", "error": said}
        status = booked[0].status

        # Booked before it is marked: after a crash between the two the repeat is a duplicate.
        def order(connection: Writing) -> dict[str, Any]:
            quarantines.mark(connection, number, "retried")
            self._orders.note(connection, actor, "retry", name, reason, {"status": status})
            return {"number": number, "status": status, "code": booked[0].code}

        return await self._orders.give(order, None)


def _shown(row: dict[str, Any]) -> dict[str, Any]:
    body = row.pop("body")
    what = "lesson" if row["seq"] is not None else "outcome"
    return {**row, "what": what, "ref": body.get("ref"), "kind": _kind(body)}


def _kind(body: dict[str, Any]) -> str | None:
    said = body.get("said") or {}
    return "value" if body.get("event") == "Value" else said.get("kind")
