"""Learner states as bytes to this layer: what is published, how it begins and begins again."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store import epochs
from service.store.database import Reading, Writing, among
from service.store.driver import update_many
from service.store.leases import read_configs

STATES_MAX = 200  # Read at once; each may be 64 KiB.


@dataclass(frozen=True, slots=True)
class Snapshot:
    """
    A published state: what it is, up to which seq it has read, when it was published.

    Args:
        halted: Nobody may bid by it any more; one without what was cancelled is being made.
    """

    seq: int
    state: bytes
    digest: str
    published_ms: int
    halted: bool = False

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
            " WHERE b.seq > l.seq AND (l.halted = 1 OR e.snapshot IS NULL"
            " OR b.seq > l.seq + :bids"
            " OR e.service_ms + :epoch <= (SELECT now_ms FROM service_clock))"
            " ORDER BY b.line_item"
        ),
        {"bids": epochs.BIDS_MAX, "epoch": epochs.EPOCH_MS},
    )
    return [row.line_item for row in rows]


def snapshots(connection: Reading | Writing, line_items: list[str]) -> dict[str, Snapshot]:
    """The current snapshot of each line item."""
    statement = among(
        "SELECT line_item, snapshot, state, digest, published_ms, halted FROM learner"
        " WHERE line_item IN :ids",
    )
    return {
        row.line_item: Snapshot(
            row.snapshot, bytes(row.state), row.digest, row.published_ms, bool(row.halted)
        )
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
    row = {"id": line_item, "seq": 0, "state": state, "stuck": 0, "tries": 0}
    update_many(connection, LEARN, [row])
    # Checkpoints under the old terms would make a later rebuild differ from a fold from zero.
    connection.execute(text("DELETE FROM checkpoint WHERE line_item = :id"), {"id": line_item})


def begin_afresh(connection: Writing, line_item: str, seq: int) -> None:
    """Note the seq of a reset: what was won before it teaches nothing more."""
    connection.execute(
        text("UPDATE learner SET reset_seq = :seq WHERE line_item = :id"),
        {"seq": seq, "id": line_item},
    )


LEARN = (
    "UPDATE learner SET seq = :seq, working = :state, stuck_seq = :stuck, tries = :tries"
    " WHERE line_item = :id"
)
