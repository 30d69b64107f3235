"""People post what one unit of a currency costs in another; apart from orders on line items."""

from __future__ import annotations

from typing import Any

from service.errors import Malformed
from service.ordering import Orders, repeat_of
from service.store import changes, rates
from service.store.database import Writing


class Rating:
    """Takes rates, for one worker."""

    def __init__(self, orders: Orders) -> None:
        self._orders = orders

    async def post(
        self,
        currency: str,
        into: str,
        rate: int,
        span: tuple[int | None, int | None],
        reason: str,
        actor: str,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """
        Let a rate count from a moment on, by default at once.

        Args:
            rate: What one unit of `currency` costs in `into`, in parts of 10^9.
            span: From when and until when, on the wall clock.

        Raises:
            Malformed: Both currencies are one, or it ends before it begins.
            Conflict: The key was used for another call.
        """
        from_ms, until_ms = span

        def order(connection: Writing) -> dict[str, Any]:
            now = self._orders.database.wall_ms()
            begins = now if from_ms is None else from_ms
            if until_ms is not None and until_ms <= begins:
                detail = "It must be later than its beginning."
                raise Malformed("bad_field", detail, {"field": "until_at"})
            before = [
                row
                for row in rates.current(connection, now)
                if (row["currency"], row["into"]) == (currency, into)
            ]
            said = {"rate": rate, "from_ms": begins, "until_ms": until_ms}
            number = rates.add(
                connection, currency=currency, into=into, wall_ms=now, actor=actor,
                reason=reason, rate=rate, from_ms=begins, until_ms=until_ms,
            )  # fmt: skip
            after = {"number": number, "currency": currency, "into": into, **said}
            detail_ = {"before": before, "after": after}
            self._orders.note(connection, actor, "rate", changes.ALL, reason, detail_)
            changes.announce(connection, rates.KIND, [changes.ALL])
            return after | {"set_ms": now, "actor": actor, "reason": reason}

        # Before the transaction, so that no key of a repeat is spent on what can never be.
        if currency == into:
            raise Malformed("bad_field", "It must be another currency.", {"field": "into"})
        # What was asked, not what it came to: from now on is the same wish a second later.
        wish = {"call": "rate", "pair": [currency, into], "rate": rate, "span": list(span)}
        return await self._orders.give(order, repeat_of(actor, idempotency, wish))

    async def list(self) -> list[dict[str, Any]]:
        """Of each pair the rate that counts now and those still to come."""
        now = self._orders.database.wall_ms()
        found: list[dict[str, Any]] = await self._orders.read(
            lambda connection: rates.current(connection, now)
        )
        return found
