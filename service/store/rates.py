"""Rates between currencies: rows are added, never changed."""

from __future__ import annotations

from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing

KIND = "rates"  # Of the change that tells workers.


def add(
    connection: Writing,
    *,
    currency: str,
    into: str,
    rate: int,
    from_ms: int,
    until_ms: int | None,
    wall_ms: int,
    actor: str,
    reason: str,
) -> int:
    """Add a rate; returns its number."""
    return int(
        connection.execute(
            text(
                "INSERT INTO currency_rate (currency, into_currency, rate, from_ms, until_ms,"
                " set_ms, actor, reason) VALUES (:currency, :into, :rate, :from_ms, :until_ms,"
                " :set_ms, :actor, :reason) RETURNING number"
            ),
            {
                "currency": currency,
                "into": into,
                "rate": rate,
                "from_ms": from_ms,
                "until_ms": until_ms,
                "set_ms": wall_ms,
                "actor": actor,
                "reason": reason,
            },
        ).scalar_one()
    )


def current(connection: Reading | Writing, wall_ms: int) -> list[dict[str, Any]]:
    """Of each pair the rate that counts now and those that are still to come."""
    # One that another has followed counts no more, whatever its own end; nothing is deleted.
    rows = connection.execute(
        text(
            "SELECT number, currency, into_currency AS into_, rate, from_ms, until_ms, set_ms,"
            " actor, reason FROM currency_rate AS one WHERE NOT EXISTS (SELECT 1 FROM"
            " currency_rate AS later WHERE later.currency = one.currency"
            " AND later.into_currency = one.into_currency AND later.from_ms <= :now"
            " AND (later.from_ms > one.from_ms"
            " OR (later.from_ms = one.from_ms AND later.number > one.number)))"
            " ORDER BY currency, into_currency, from_ms, number"
        ),
        {"now": wall_ms},
    )
    return [{"into" if n == "into_" else n: v for n, v in row._mapping.items()} for row in rows]
