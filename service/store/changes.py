"""The gapless change number: how every worker learns that something is new."""

from __future__ import annotations

from sqlalchemy import text

from service.store.database import Reading, Writing
from service.store.workers import bound

SNAPSHOT = "snapshot"  # The kind of change that nobody waits to see applied.
ALL = "*"  # The line item of a change that concerns all; no id may contain it.


def announce(connection: Writing, kind: str, line_items: list[str]) -> int:
    """
    Take the next numbers; call it last, since their one row is locked last of all.

    A plain sequence would not do: rows that commit late would be missed by a reader
    that asks for what lies above its last.
    """
    last = connection.execute(
        text("UPDATE change_counter SET number = number + :n WHERE id = 1 RETURNING number"),
        {"n": len(line_items)},
    ).scalar_one()
    # One row for each, so that a reader who was away can renew only what it knows.
    rows = [
        {"number": last - len(line_items) + 1 + place, "kind": kind, "line_item": line_item}
        for place, line_item in enumerate(line_items)
    ]
    connection.execute(
        text(
            "INSERT INTO change_log (number, kind, line_item) VALUES (:number, :kind, :line_item)"
        ),
        rows,
    )
    return int(last)


def since(connection: Reading, number: int) -> list[tuple[int, str, str]]:
    """What changed after `number`: (number, kind, line item), in order."""
    rows = connection.execute(
        text("SELECT number, kind, line_item FROM change_log WHERE number > :n ORDER BY number"),
        {"n": number},
    )
    return [(row.number, row.kind, row.line_item) for row in rows]


def latest(connection: Reading | Writing) -> int:
    """The last number taken."""
    return int(connection.execute(text("SELECT number FROM change_counter")).scalar_one())


def prune(connection: Writing) -> None:
    """
    Forget changes that all workers have passed from which a price may still leave.

    The newest stays, so that a worker which slept through what is gone sees that it did.
    """
    passed = min(bound(connection).values(), default=latest(connection))
    connection.execute(
        text("DELETE FROM change_log WHERE number <= :passed AND number < :newest"),
        {"passed": passed, "newest": latest(connection)},
    )
