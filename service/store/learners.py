"""Learner states as bytes: the current snapshot, checkpoints, and the lessons not yet folded."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.ledger.entries import Body
from service.store import epochs
from service.store.changes import announce
from service.store.database import Database, Reading, Writing, among, locking
from service.store.leases import read_configs

Lesson = tuple[str, Body, int]  # Kind, body and service time.
Fold = Callable[[bytes, list[Lesson], dict[str, Any]], bytes]
Lawful = Callable[[bytes, dict[str, Any]], bytes | None]
ENTRIES_MAX = 2000
STATES_MAX = 200  # Read at once; each may be 64 KiB.


@dataclass(frozen=True, slots=True)
class Snapshot:
    """A published state: what it is, up to which seq it has read, when it was published."""

    seq: int
    state: bytes
    digest: str
    published_ms: int

    @property
    def sound(self) -> bool:
        """Whether the bytes are those that were published."""
        return digest_of(self.state) == self.digest


def digest_of(state: bytes) -> str:
    """The fingerprint kept beside a state."""
    return hashlib.sha256(state).hexdigest()


def behind(connection: Reading) -> list[str]:
    """
    Line items whose stream has entries that their learner has not read.

    One that bids by a law waits until its epoch is over, so that a law serves many bids.
    """
    rows = connection.execute(
        text(
            "SELECT b.line_item FROM balance b JOIN learner l ON l.line_item = b.line_item"
            " LEFT JOIN epoch e ON e.line_item = l.line_item AND e.snapshot = l.snapshot"
            " WHERE b.seq > l.seq AND (e.snapshot IS NULL OR b.seq > l.seq + :bids"
            " OR e.service_ms + :epoch <= (SELECT now_ms FROM service_clock))"
            " ORDER BY b.line_item"
        ),
        {"bids": epochs.BIDS_MAX, "epoch": epochs.EPOCH_MS},
    )
    return [row.line_item for row in rows]


def lawless(state: bytes, config: dict[str, Any]) -> bytes | None:
    """No law: what a method that draws nothing bids by."""
    return None


def teach(
    database: Database,
    line_item: str,
    fold: Fold,
    checkpoint_entries: int,
    lawful: Lawful = lawless,
) -> int:
    """
    Fold the next entries into the one state of a line item; returns how many were read.

    One teacher at a time: the learner's row is locked, and another teacher passes by.

    Args:
        fold: Pure; state, lessons and the line item's configuration in, state out.
        checkpoint_entries: A checkpoint is kept whenever seq passes a multiple of it.
        lawful: State and configuration in, the law that bids are drawn from out, if any.
    """

    def work(connection: Writing) -> int:
        mine = "SELECT seq, working, digest FROM learner WHERE line_item = :id"
        statement = locking(connection, mine, skip=True)
        row = connection.execute(statement, {"id": line_item}).one_or_none()
        if row is None:
            return 0
        lessons = _lessons(connection, line_item, row.seq, ENTRIES_MAX)
        # Read under the lock, for a change of terms refolds under it too.
        config = read_configs(connection, [line_item])[line_item]
        state, seq = fold(bytes(row.working), lessons, config), row.seq + len(lessons)
        now = database.wall_ms()
        connection.execute(_LEARN, {"id": line_item, "seq": seq, "state": state})
        if seq // checkpoint_entries > row.seq // checkpoint_entries:
            _checkpoint(connection, line_item, seq, state, now)
        # A state that has not caught up is not published, or a refold would forget in public.
        if len(lessons) < ENTRIES_MAX and digest_of(state) != row.digest:
            _publish(connection, line_item, seq, state, now)
            if (law := lawful(state, config)) is not None:
                epochs.keep(connection, line_item, seq, law)
        return len(lessons)

    return database.write(work)


def fold_all(connection: Reading, line_item: str, start: bytes, fold: Fold) -> bytes:
    """The state that the whole stream up to the learner's seq gives, folded from `start`."""
    end = connection.execute(
        text("SELECT seq FROM learner WHERE line_item = :id"), {"id": line_item}
    ).scalar_one()
    config = read_configs(connection, [line_item])[line_item]
    state, seq = start, 0
    while lessons := _lessons(connection, line_item, seq, min(ENTRIES_MAX, end - seq)):
        state = fold(state, lessons, config)
        seq += len(lessons)
    return state


def snapshots(connection: Reading | Writing, line_items: list[str]) -> dict[str, Snapshot]:
    """The current snapshot of each line item."""
    statement = among(
        "SELECT line_item, snapshot, state, digest, published_ms FROM learner"
        " WHERE line_item IN :ids",
    )
    return {
        row.line_item: Snapshot(row.snapshot, bytes(row.state), row.digest, row.published_ms)
        for row in connection.execute(statement, {"ids": line_items})
    }


def unreadable(
    connection: Reading, after: str, readable: Callable[[bytes, dict[str, Any]], bool]
) -> tuple[list[str], str | None]:
    """
    Of the next line items after an id: those whose state cannot be read, and the last id seen.

    Args:
        readable: Pure; whether this release can go on from a state under a configuration.
    """
    statement = text(
        "SELECT line_item, state FROM learner WHERE line_item > :after"
        " ORDER BY line_item LIMIT :limit"
    )
    rows = connection.execute(statement, {"after": after, "limit": STATES_MAX}).all()
    configs = read_configs(connection, [row.line_item for row in rows])
    bad = [r.line_item for r in rows if not readable(bytes(r.state), configs[r.line_item])]
    return bad, rows[-1].line_item if rows else None


def begin(connection: Writing, line_item: str, state: bytes, wall_ms: int) -> None:
    """Publish the first state of a new line item, so that it can bid at once."""
    connection.execute(
        text(
            "INSERT INTO learner"
            " (line_item, seq, working, reset_seq, snapshot, state, digest, published_ms)"
            " VALUES (:id, 0, :state, 0, 0, :state, :digest, :now)"
        ),
        {"id": line_item, "state": state, "digest": digest_of(state), "now": wall_ms},
    )


def refold(connection: Writing, line_item: str, state: bytes) -> None:
    """Let the teacher read the whole stream again from `state`, after a change of terms."""
    connection.execute(_LEARN, {"id": line_item, "seq": 0, "state": state})
    # Checkpoints under the old terms would make a later rebuild differ from a fold from zero.
    connection.execute(text("DELETE FROM checkpoint WHERE line_item = :id"), {"id": line_item})


def begin_afresh(connection: Writing, line_item: str, seq: int) -> None:
    """Note the seq of a reset: what was won before it teaches nothing more."""
    connection.execute(
        text("UPDATE learner SET reset_seq = :seq WHERE line_item = :id"),
        {"seq": seq, "id": line_item},
    )


def _lessons(connection: Reading | Writing, line_item: str, seq: int, limit: int) -> list[Lesson]:
    rows = connection.execute(
        text(
            "SELECT kind, body, service_ms FROM stream WHERE line_item = :id AND seq > :seq"
            " ORDER BY seq LIMIT :limit"
        ),
        {"id": line_item, "seq": seq, "limit": limit},
    )
    return [(row.kind, json.loads(row.body), row.service_ms) for row in rows]


def _publish(connection: Writing, line_item: str, seq: int, state: bytes, now: int) -> None:
    row = {"seq": seq, "state": state, "digest": digest_of(state), "now": now, "id": line_item}
    connection.execute(_PUBLISH, row)
    announce(connection, "snapshot", [line_item])


def _checkpoint(connection: Writing, line_item: str, seq: int, state: bytes, now: int) -> None:
    connection.execute(
        text(
            "INSERT INTO checkpoint (line_item, seq, state, digest, at_ms)"
            " VALUES (:id, :seq, :state, :digest, :now) ON CONFLICT DO NOTHING"
        ),
        {"id": line_item, "seq": seq, "state": state, "digest": digest_of(state), "now": now},
    )


_LEARN = text("UPDATE learner SET seq = :seq, working = :state WHERE line_item = :id")
_PUBLISH = text(
    "UPDATE learner SET snapshot = :seq, state = :state, digest = :digest, published_ms = :now"
    " WHERE line_item = :id"
)
