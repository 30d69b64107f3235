"""Laws that randomised methods bid by, one per published snapshot, kept until grace has passed.

Bytes to this layer. An outcome may come long after its bid; what the bid was likely to beat
is then read from the law of the snapshot that its ticket names.
"""

from __future__ import annotations

from collections.abc import Collection

from sqlalchemy import BigInteger, text

from service.store.clock import now_ms
from service.store.database import Reading, Writing, among
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


def laws(
    connection: Reading | Writing, wanted: Collection[tuple[str, int]]
) -> dict[tuple[str, int], bytes]:
    """The laws of these snapshots; none where it is gone, never was, or is from before a reset."""
    if not wanted:
        return {}
    names, snapshots = zip(*wanted, strict=True)
    row = {"ids": sorted(set(names)), "snapshots": sorted(set(snapshots))}
    rows = connection.execute(_LAWS, row)
    return {(line_item, snapshot): bytes(law) for line_item, snapshot, law in rows}


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


_LAWS = among(
    among(
        "SELECT e.line_item, e.snapshot, e.law FROM epoch e JOIN learner l"
        " ON l.line_item = e.line_item WHERE e.line_item IN :ids AND e.snapshot IN :snapshots"
        " AND e.snapshot >= l.reset_seq"
    ),
    "snapshots",
    BigInteger,
)
_PRUNE = text(
    "DELETE FROM epoch WHERE line_item = :id AND service_ms < :before"
    " AND snapshot <> (SELECT snapshot FROM learner WHERE line_item = :id)"
)
