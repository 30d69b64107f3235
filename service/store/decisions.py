"""The decision log and the quarantine: written in bulk, read by people."""

from __future__ import annotations

import json
from typing import Any

from sqlalchemy import text

from service.store.database import Database, Writing

Decision = dict[str, Any]


def log(database: Database, decisions: list[Decision]) -> None:
    """Append decisions; losing some in a crash loses no money, since tickets carry it."""
    database.write(lambda connection: connection.execute(_INSERT, decisions))


def prune(connection: Writing, before_ms: int) -> int:
    """Forget decisions made before this wall clock moment."""
    statement = text("DELETE FROM decision WHERE at_ms < :before")
    return connection.execute(statement, {"before": before_ms}).rowcount


def quarantine(
    connection: Writing,
    line_item: str,
    error: str,
    body: dict[str, Any],
    wall_ms: int,
    seq: int | None = None,
) -> None:
    """
    Set something aside that failed alone, with what went wrong.

    Args:
        body: The outcome that could not be booked.
        seq: The entry that could not be learnt instead.
    """
    connection.execute(
        text(
            "INSERT INTO quarantine (at_ms, line_item, error, body, seq)"
            " VALUES (:now, :line_item, :error, :body, :seq)"
        ),
        {
            "now": wall_ms,
            "line_item": line_item,
            "error": error,
            "body": json.dumps(body),
            "seq": seq,
        },
    )


_INSERT = text(
    "INSERT INTO decision (at_ms, line_item, ref, request_id, source, floor, price,"
    " reason, set_by, snapshot, test) VALUES (:at_ms, :line_item, :ref, :request_id,"
    " :source, :floor, :price, :reason, :set_by, :snapshot, :test)"
)
