"""Who did what, when and why: rows are added, never changed, and sealed as they commit."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from sqlalchemy import text

from service.store.chain import seal
from service.store.database import Reading, Writing, at_the_end


def note(
    connection: Writing,
    *,
    wall_ms: int,
    actor: str,
    action: str,
    line_item: str,
    reason: str,
    detail: Mapping[str, Any],
) -> None:
    """Add one row; `detail` holds before and after."""
    connection.execute(
        text(
            "INSERT INTO journal (at_ms, actor, action, line_item, reason, detail, hash)"
            # Empty until the end of the transaction: the lock of the chain is taken last of all.
            " VALUES (:at_ms, :actor, :action, :line_item, :reason, :detail, '')"
        ),
        {
            "at_ms": wall_ms,
            "actor": actor,
            "action": action,
            "line_item": line_item,
            "reason": reason,
            # Sorted, so that the same detail is the same text and has the same hash.
            "detail": json.dumps(detail, sort_keys=True),
        },
    )
    at_the_end(connection, seal)


def newest(connection: Reading, line_item: str, limit: int) -> list[dict[str, Any]]:
    """The newest rows of one line item, newest first."""
    rows = connection.execute(
        text(
            "SELECT number, at_ms, actor, action, line_item, reason, detail FROM journal"
            " WHERE line_item = :id ORDER BY number DESC LIMIT :n"
        ),
        {"id": line_item, "n": limit},
    )
    return [{**row._mapping, "detail": json.loads(row.detail)} for row in rows]
