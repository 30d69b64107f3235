"""Named reads for people: what the state page and the orders need to know at one moment."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import text

from service.errors import no_such_line_item
from service.ledger.days import local_day
from service.store.clock import now_ms
from service.store.database import Reading, Writing
from service.store.findings import Kept, still_open
from service.store.learners import Snapshot, snapshots
from service.store.line_items import Row, load

FEED_KINDS = ("won", "lost", "void", "billed", "value")


@dataclass(frozen=True, slots=True)
class Facts:
    """Everything known of one line item, read in one consistent view; money in nanos."""

    row: Row
    balance: dict[str, int]
    day: dict[str, Any] | None
    slices: list[dict[str, Any]]
    snapshot: Snapshot
    learner_seq: int
    feed: dict[str, int]
    passes: dict[str, int]
    quarantined: int
    wall_ms: int
    unread_ms: int | None = None
    findings: list[Kept] = field(default_factory=list)


def facts(connection: Reading, line_item: str) -> Facts:
    """
    Read it all.

    Raises:
        NotFound: There is no such line item.
    """
    rows = load(connection, [line_item])
    if line_item not in rows:
        raise no_such_line_item()
    wall_ms = _wall_ms(connection)
    row = rows[line_item]
    return Facts(
        row,
        _one(connection, "SELECT * FROM balance WHERE line_item = :id", line_item),
        _today(connection, row, wall_ms),
        _slices(connection, line_item),
        snapshots(connection, [line_item])[line_item],
        learner_seq := _scalar(connection, _LEARNER_SEQ, line_item),
        _feed(connection, line_item),
        _passes(connection, line_item),
        _scalar(connection, _QUARANTINED, line_item),
        wall_ms,
        _unread_ms(connection, line_item, learner_seq),
        list(still_open(connection, line_item).values()),
    )


def last_expiry_ms(connection: Writing, line_item: str | None) -> int:
    """The wall clock moment after which no price can leave from any open slice."""
    row = connection.execute(
        text(
            "SELECT coalesce(max(expires_ms), 0) FROM slice WHERE state = 'open'"
            " AND (:id = '' OR line_item = :id)"
        ),
        {"id": line_item or ""},
    ).scalar_one()
    # Leases end by service time, people read the wall clock: what is left is added to it.
    return _wall_ms(connection) + max(0, int(row) - now_ms(connection))


def _wall_ms(connection: Reading | Writing) -> int:
    """The wall clock as service time saw it last: at most a second old while we run."""
    return int(connection.execute(text("SELECT seen_ms FROM service_clock")).scalar_one())


def _one(connection: Reading, statement: str, line_item: str) -> dict[str, Any]:
    return dict(connection.execute(text(statement), {"id": line_item}).one()._mapping)


def _scalar(connection: Reading, statement: str, line_item: str) -> int:
    return int(connection.execute(text(statement), {"id": line_item}).scalar_one())


def _unread_ms(connection: Reading, line_item: str, learner_seq: int) -> int | None:
    """When the oldest entry came that the learner has not read; None where it has read all."""
    statement = text("SELECT at_ms FROM stream WHERE line_item = :id AND seq = :next")
    row = {"id": line_item, "next": learner_seq + 1}
    return connection.execute(statement, row).scalar_one_or_none()


def _today(connection: Reading, row: Row, wall_ms: int) -> dict[str, Any] | None:
    found = connection.execute(
        text("SELECT * FROM local_day WHERE line_item = :id AND day = :day"),
        {"id": row.id, "day": local_day(wall_ms, row.config["flight"]["time_zone"])},
    ).one_or_none()
    return None if found is None else dict(found._mapping)


def _slices(connection: Reading, line_item: str) -> list[dict[str, Any]]:
    rows = connection.execute(
        text(
            "SELECT state, count(*) AS slices, sum(remaining) AS remaining, sum(owed) AS owed"
            " FROM slice WHERE line_item = :id AND remaining + owed > 0"
            " GROUP BY state ORDER BY state"
        ),
        {"id": line_item},
    )
    return [{k: v if k == "state" else int(v) for k, v in r._mapping.items()} for r in rows]


def _feed(connection: Reading, line_item: str) -> dict[str, int]:
    """When each kind of outcome came last, in wall clock ms."""
    statement = text(
        "SELECT at_ms FROM stream WHERE line_item = :id AND kind = :kind ORDER BY seq DESC LIMIT 1"
    )
    found = {
        kind: connection.execute(statement, {"id": line_item, "kind": kind}).scalar_one_or_none()
        for kind in FEED_KINDS
    }
    return {kind: int(at_ms) for kind, at_ms in found.items() if at_ms is not None}


def _passes(connection: Reading, line_item: str) -> dict[str, int]:
    """Why the latest decisions passed, counted over the last thousand."""
    rows = connection.execute(
        text(
            "SELECT reason, count(*) AS n FROM (SELECT reason FROM decision"
            " WHERE line_item = :id AND test = 0 ORDER BY at_ms DESC, number DESC LIMIT 1000)"
            " latest"
            " WHERE reason IS NOT NULL GROUP BY reason ORDER BY reason"
        ),
        {"id": line_item},
    )
    return {row.reason: int(row.n) for row in rows}


_LEARNER_SEQ = "SELECT seq FROM learner WHERE line_item = :id"
_QUARANTINED = "SELECT count(*) FROM quarantine WHERE line_item = :id AND state = 'waiting'"
