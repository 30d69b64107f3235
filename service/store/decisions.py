"""The decision log and the quarantine: written in bulk, read by people."""

from __future__ import annotations

import json
from operator import itemgetter
from typing import Any

from sqlalchemy import text

from service.store import charting
from service.store.database import Database, Writing
from service.store.driver import Insert

Decision = dict[str, Any]
PRUNED_MAX = 5000
COLUMNS = {
    **{"at_ms": "BIGINT", "line_item": "TEXT", "ref": "TEXT", "request_id": "TEXT"},
    **{"source": "TEXT", "floor": "BIGINT", "price": "BIGINT", "reason": "TEXT", "set_by": "TEXT"},
    **{"snapshot": "BIGINT", "test": "BIGINT", "auction": "TEXT", "arm": "TEXT", "held": "BIGINT"},
    **{"floor_held": "BIGINT", "arm_odds": "FLOAT", "odds": "FLOAT"},
}


def log(database: Database, decisions: list[Decision]) -> None:
    """Append decisions; losing some in a crash loses no money, since tickets carry it."""
    rows = [_values({**_UNKEPT, **decision}) for decision in decisions]

    def work(connection: Writing) -> None:
        _LOG.run(connection, rows)
        # In the same transaction, so that a chart counts each logged decision once.
        charting.add(connection, charting.of_decisions(decisions))

    database.write(work)


def prune(connection: Writing, before_ms: int) -> int:
    """Forget the oldest decisions made before this wall clock moment; returns how many."""
    return connection.execute(_PRUNE, {"before": before_ms, "limit": PRUNED_MAX}).rowcount


def prune_quarantine(connection: Writing, before_ms: int) -> int:
    """Forget what was set aside before this wall clock moment; returns how much."""
    statement = text("DELETE FROM quarantine WHERE at_ms < :before")
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


# Rows were numbered as they came, so the oldest are found without an index by time, and few at
# once are deleted in less than a statement may take.
_PRUNE = text(
    "DELETE FROM decision WHERE number IN (SELECT number FROM (SELECT number, at_ms FROM decision"
    " ORDER BY number LIMIT :limit) AS oldest WHERE at_ms < :before)"
)
_LOG = Insert("decision", **COLUMNS)
_values = itemgetter(*COLUMNS)
# What a decision that was never weighed has nothing to say of.
_UNKEPT: Decision = {
    **{"auction": "", "arm": ""},
    **dict.fromkeys(("held", "floor_held", "arm_odds", "odds")),
}
