"""Laws that randomised methods bid by, one per published snapshot, kept until grace has passed.

Bytes to this layer. An outcome may come long after its bid; what the bid was likely to beat
is then read from the law of the snapshot that its ticket names.
"""

from __future__ import annotations

from sqlalchemy import text

from service.store.clock import now_ms
from service.store.database import Reading, Writing
from service.store.leases import read_configs

BIDS_MAX = 100  # A new law at the latest after so many entries,
EPOCH_MS = 1000  # or after so long.
SLACK_MS = 3_600_000  # Far longer than a slice: bids of a law may leave as long as it is current.


def keep(connection: Writing, line_item: str, snapshot: int, law: bytes) -> None:
    """Keep the law of a snapshot; a second one of the same snapshot is the same."""
    row = {"id": line_item, "snapshot": snapshot, "law": law, "now": now_ms(connection)}
    connection.execute(
        text(
            "INSERT INTO epoch (line_item, snapshot, law, service_ms)"
            " VALUES (:id, :snapshot, :law, :now)"
            " ON CONFLICT (line_item, snapshot) DO UPDATE SET law = excluded.law"
        ),
        row,
    )


def law(connection: Reading | Writing, line_item: str, snapshot: int) -> bytes | None:
    """The law of a snapshot, or None when it is gone, never was, or is from before a reset."""
    statement = text(
        "SELECT law FROM epoch WHERE line_item = :id AND snapshot = :snapshot"
        " AND snapshot >= (SELECT reset_seq FROM learner WHERE line_item = :id)"
    )
    found = connection.execute(statement, {"id": line_item, "snapshot": snapshot})
    kept = found.scalar_one_or_none()
    return None if kept is None else bytes(kept)


def end(connection: Writing, line_item: str) -> None:
    """
    Forget the law of the published snapshot, because bids may leave by another from now on.

    Between a change of cap and the refold, tickets of old and new bids name one snapshot.
    """
    connection.execute(
        text(
            "DELETE FROM epoch WHERE line_item = :id"
            " AND snapshot = (SELECT snapshot FROM learner WHERE line_item = :id)"
        ),
        {"id": line_item},
    )


def prune(connection: Writing) -> None:
    """Forget laws whose bids have all had their grace, but never the current one."""
    names = connection.execute(text("SELECT DISTINCT line_item FROM epoch")).scalars().all()
    now = now_ms(connection)
    for name, config in read_configs(connection, list(names)).items():
        row = {"id": name, "before": now - config["grace_ms"] - SLACK_MS}
        connection.execute(_PRUNE, row)


_PRUNE = text(
    "DELETE FROM epoch WHERE line_item = :id AND service_ms < :before"
    " AND snapshot <> (SELECT snapshot FROM learner WHERE line_item = :id)"
)
