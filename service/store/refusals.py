"""Who was not let in: counted by minute, key, route and code, and never with what was sent."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing

ROWS_MAX = 100_000  # About ten weeks of a row a minute; a flood forgets the oldest first.
PIECE_ROWS = 2000

# Minute in wall clock ms, key id or nothing, method and path as they are written, code.
Place = tuple[int, str, str, str]


def count(connection: Writing, counts: Mapping[Place, int]) -> None:
    """Add what one worker has counted."""
    rows = [
        {"minute": minute, "key": key_id, "route": route, "code": code, "count": number}
        # Sorted, so that two workers which count the same wait for one another in one order.
        for (minute, key_id, route, code), number in sorted(counts.items())
    ]
    if rows:
        connection.execute(_COUNT, rows)


def page(connection: Reading, before: int, limit: int) -> list[dict[str, Any]]:
    """The newest rows before a number, newest first."""
    rows = {"before": before, "limit": limit}
    return [dict(row._mapping) for row in connection.execute(_PAGE, rows)]


def prune(connection: Writing, before_ms: int) -> int:
    """Forget a piece of what is older, or beyond the bound; returns how many rows went."""
    rows = {"before": before_ms, "rows": ROWS_MAX, "limit": PIECE_ROWS}
    return connection.execute(_PRUNE, rows).rowcount


_COUNT = text(
    "INSERT INTO refusal (minute_ms, key_id, route, code, count)"
    " VALUES (:minute, :key, :route, :code, :count)"
    " ON CONFLICT (minute_ms, key_id, route, code) DO UPDATE"
    " SET count = refusal.count + excluded.count"
)
# Named as the key is now; a refusal itself keeps an id and no name.
_PAGE = text(
    "SELECT r.number, r.minute_ms, r.key_id, k.name AS key_name, r.route, r.code, r.count"
    " FROM refusal r LEFT JOIN access_key k ON k.id = r.key_id"
    " WHERE r.number < :before ORDER BY r.number DESC LIMIT :limit"
)
_PRUNE = text(
    "DELETE FROM refusal WHERE number IN (SELECT number FROM refusal WHERE minute_ms < :before"
    " OR number <= (SELECT max(number) FROM refusal) - :rows ORDER BY number LIMIT :limit)"
)
