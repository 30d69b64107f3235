"""Rehearsals as rows: what was asked, how far each is, what it came to.

The row says who plays it. A rehearsal whose worker is gone is lost: nothing of it survives.
"""

from __future__ import annotations

import json
from collections.abc import Collection, Mapping
from typing import Any

from sqlalchemy import text

from service.errors import NotFound
from service.store.database import Reading, Writing, among
from service.store.workers import live

OPEN = ("queued", "running")
LOST = "lost"
Row = dict[str, Any]


def create(
    connection: Writing,
    *,
    name: str,
    actor: str,
    line_item: str,
    worker: str,
    total: int,
    asked: Mapping[str, Any],
    wall_ms: int,
) -> int:
    """
    Put a rehearsal in the queue; returns its number.

    Args:
        line_item: Whose policies it starts from; empty for none.
        total: How many auctions there are to play.
        asked: What was asked for, as it was.
    """
    row = {
        **{"name": name, "actor": actor, "line_item": line_item, "worker": worker},
        **{"total": total, "asked": json.dumps(asked), "now": wall_ms},
    }
    return int(connection.execute(_CREATE, row).scalar_one())


def start(connection: Writing, number: int, wall_ms: int) -> bool:
    """Say that it plays now; False where somebody has cancelled it meanwhile."""
    statement = text(
        "UPDATE rehearsal SET state = 'running', started_ms = :now"
        " WHERE number = :number AND state = 'queued'"
    )
    return connection.execute(statement, {"number": number, "now": wall_ms}).rowcount == 1


def advance(connection: Writing, number: int, done: int) -> bool:
    """Say how many auctions are played; returns whether it may go on."""
    statement = text(
        "UPDATE rehearsal SET done = :done WHERE number = :number AND state = 'running'"
        " AND stopping = 0"
    )
    return connection.execute(statement, {"number": number, "done": done}).rowcount == 1


def end(
    connection: Writing,
    number: int,
    state: str,
    wall_ms: int,
    result: Mapping[str, Any] | None = None,
    error: str | None = None,
) -> None:
    """Close a rehearsal that is still open; one that is closed stays as it is."""
    # A figure that is no number is no JSON; let it fail here and not at whoever reads it.
    told = None if result is None else json.dumps(result, allow_nan=False)
    row = {"number": number, "state": state, "now": wall_ms, "result": told, "error": error}
    connection.execute(_END, row)


def stop(connection: Writing, number: int, wall_ms: int) -> Row:
    """
    Cancel one: what waits ends at once, what plays is told to stop.

    Raises:
        NotFound: There is none.
    """
    waiting = text(
        "UPDATE rehearsal SET state = 'cancelled', ended_ms = :now"
        " WHERE number = :number AND state = 'queued'"
    )
    playing = text("UPDATE rehearsal SET stopping = 1 WHERE number = :number AND state = 'running'")
    # Both, whatever it was seen as: between a look and this it may have begun to play.
    connection.execute(waiting, {"number": number, "now": wall_ms})
    connection.execute(playing, {"number": number})
    return one(connection, number)


def one(connection: Reading | Writing, number: int) -> Row:
    """
    One rehearsal with all it came to.

    Raises:
        NotFound: There is none.
    """
    found = connection.execute(_ONE, {"number": number}).one_or_none()
    if found is None:
        raise NotFound("no_such_rehearsal", "There is no rehearsal with this id.")
    row = _read(dict(found._mapping), live(connection))
    return {**row, "result": json.loads(found.result) if found.result else None}


def page(
    connection: Reading, before: int | None, limit: int, only: Collection[str] | None = None
) -> list[Row]:
    """
    The newest rehearsals before a number, newest first, without their results.

    Args:
        only: Those that start from these line items; None for all there are.
    """
    last = 2**62 if before is None else before
    alive, said = live(connection), {"before": last, "limit": limit}
    if only is None:
        rows = connection.execute(_PAGE, said)
    else:
        rows = connection.execute(_PAGE_OF, {**said, "only": sorted(only)})
    return [_read(dict(row._mapping), alive) for row in rows]


def open_of(connection: Reading | Writing, worker: str) -> int:
    """How many rehearsals wait or play at one worker."""
    statement = text(
        "SELECT count(*) FROM rehearsal WHERE worker = :worker AND state IN ('queued', 'running')"
    )
    return int(connection.execute(statement, {"worker": worker}).scalar_one())


def lose(connection: Writing, wall_ms: int) -> int:
    """Close what nobody plays any more; returns how many."""
    alive = live(connection)
    rows = connection.execute(_OPEN).all()
    gone = [row.number for row in rows if row.worker not in alive]
    for number in gone:
        end(connection, number, LOST, wall_ms)
    return len(gone)


def prune(connection: Writing, before_ms: int) -> int:
    """Forget rehearsals made before this wall clock moment; returns how many."""
    # Never what is open, however old: its worker ends it, or it is lost with its worker.
    statement = text("DELETE FROM rehearsal WHERE created_ms < :before AND ended_ms IS NOT NULL")
    return connection.execute(statement, {"before": before_ms}).rowcount


def _read(found: Mapping[str, Any], alive: Mapping[str, int]) -> Row:
    row = {name: found[name] for name in _SHOWN}
    # What a dead worker left open is lost, whether or not anybody has closed it yet.
    if row["state"] in OPEN and row["worker"] not in alive:
        row["state"] = LOST
    return {**row, "asked": json.loads(row["asked"])}


_SHOWN = (
    *("number", "name", "actor", "line_item", "worker", "state", "done", "total", "asked"),
    *("stopping", "error", "created_ms", "started_ms", "ended_ms"),
)
_COLUMNS = ", ".join(_SHOWN)
_ONE = text(f"SELECT {_COLUMNS}, result FROM rehearsal WHERE number = :number")  # noqa: S608
_PAGE = text(
    f"SELECT {_COLUMNS} FROM rehearsal WHERE number < :before"  # noqa: S608
    " ORDER BY number DESC LIMIT :limit"
)
_PAGE_OF = among(
    f"SELECT {_COLUMNS} FROM rehearsal WHERE number < :before"  # noqa: S608
    " AND line_item IN :only ORDER BY number DESC LIMIT :limit",
    "only",
)
_OPEN = text("SELECT number, worker FROM rehearsal WHERE state IN ('queued', 'running')")
_CREATE = text(
    "INSERT INTO rehearsal (name, actor, line_item, worker, total, asked, created_ms)"
    " VALUES (:name, :actor, :line_item, :worker, :total, :asked, :now) RETURNING number"
)
# Steps are told now and then only, so what is done says itself that it played them all.
_END = text(
    "UPDATE rehearsal SET state = :state, ended_ms = :now, result = :result, error = :error,"
    " done = CASE WHEN :state = 'done' THEN total ELSE done END"
    " WHERE number = :number AND state IN ('queued', 'running')"
)
