"""Rows that stop bidding, each with its source; a line item bids when none is left."""

from __future__ import annotations

from typing import Any

from sqlalchemy import text

from service.store import outbox
from service.store.changes import ALL
from service.store.database import Reading, Writing, among, locking


def put(
    connection: Writing, line_item: str, source: str, *, wall_ms: int, actor: str, reason: str
) -> bool:
    """Freeze; False when this source had frozen it already."""
    done = connection.execute(
        text(
            "INSERT INTO freezing (line_item, source, at_ms, actor, reason)"
            " VALUES (:id, :source, :at_ms, :actor, :reason) ON CONFLICT DO NOTHING"
        ),
        {"id": line_item, "source": source, "at_ms": wall_ms, "actor": actor, "reason": reason},
    )
    if done.rowcount == 1:
        outbox.put(connection, "freeze", line_item, {"source": source}, wall_ms)
    return done.rowcount == 1


def lift(connection: Writing, line_item: str, sources: list[str], *, wall_ms: int) -> int:
    """Remove the freezes of these sources; returns how many there were."""
    statement = among(
        "DELETE FROM freezing WHERE line_item = :id AND source IN :sources RETURNING source",
        "sources",
    )
    rows = connection.execute(statement, {"id": line_item, "sources": sources})
    lifted = sorted(row.source for row in rows)
    if lifted:
        outbox.put(connection, "thaw", line_item, {"sources": lifted}, wall_ms)
    return len(lifted)


def on(connection: Reading | Writing, line_items: list[str]) -> dict[str, list[dict[str, Any]]]:
    """The freezes on each of these names; ask for "*" to see the switch over all."""
    statement = among(
        "SELECT line_item, source, at_ms, actor, reason FROM freezing"
        " WHERE line_item IN :ids ORDER BY at_ms, source",
    )
    found: dict[str, list[dict[str, Any]]] = {name: [] for name in line_items}
    for row in connection.execute(statement, {"ids": line_items}):
        freeze = dict(row._mapping)
        found[freeze.pop("line_item")].append(freeze)
    return found


def frozen(connection: Reading | Writing, line_items: list[str]) -> set[str]:
    """Those of these line items that are frozen, by themselves or with all."""
    found = on(connection, sorted({ALL, *line_items}))
    return {name for name in line_items if found[name] or found[ALL]}


def hold_still(connection: Writing, line_item: str) -> None:
    """
    Lock what a lease locks first, before a freeze is put.

    Whoever leases at this moment is seen by the freeze, or sees it; no slice comes in between
    and outlives the moment that the freeze names.
    """
    statement = "SELECT line_item FROM balance WHERE :id IN (line_item, :all) ORDER BY line_item"
    connection.execute(locking(connection, statement), {"id": line_item, "all": ALL})
