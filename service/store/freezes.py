"""Rows that stop bidding, each with its source; a line item bids when none is left."""

from __future__ import annotations

from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing, among


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
    return done.rowcount == 1


def lift(connection: Writing, line_item: str, sources: list[str]) -> int:
    """Remove the freezes of these sources; returns how many there were."""
    statement = among(
        "DELETE FROM freezing WHERE line_item = :id AND source IN :sources", "sources"
    )
    return connection.execute(statement, {"id": line_item, "sources": sources}).rowcount


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
