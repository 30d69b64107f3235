"""Who is alive and how far each has read the changes."""

from __future__ import annotations

from sqlalchemy import text

from service.store.clock import now_ms
from service.store.database import Reading, Writing

LIVE_MS = 10_000  # Service time without a heartbeat after which a worker counts as gone.
FORGET_MS = 86_400_000  # And after which its row is nobody's: no slice is leased for so long.


def beat(connection: Writing, worker: str, change_seen: int, wall_ms: int) -> None:
    """Say that this worker lives and has applied every change up to `change_seen`."""
    connection.execute(
        text(
            "INSERT INTO worker (id, started_ms, beat_ms, change_seen)"
            " VALUES (:id, :wall, :now, :seen)"
            " ON CONFLICT (id) DO UPDATE SET beat_ms = :now, change_seen = :seen"
        ),
        {"id": worker, "wall": wall_ms, "now": now_ms(connection), "seen": change_seen},
    )


def leave(connection: Writing, worker: str) -> None:
    """Take a worker off the list after it has given its slices back."""
    connection.execute(text("DELETE FROM worker WHERE id = :id"), {"id": worker})


def live(connection: Reading | Writing) -> dict[str, int]:
    """Live workers and the change each has passed."""
    rows = connection.execute(
        text("SELECT id, change_seen FROM worker WHERE beat_ms > :since"),
        {"since": now_ms(connection) - LIVE_MS},
    )
    return {row.id: row.change_seen for row in rows}


def bound(connection: Reading | Writing) -> dict[str, int]:
    """
    Workers from which a price may still leave, and the change each has passed.

    That is who lives, and who is silent but may wake up with a slice whose time is not over.
    One that has left, or whose death its crew has seen, is on the list no more.
    """
    now = now_ms(connection)
    rows = connection.execute(
        text(
            "SELECT w.id, w.change_seen FROM worker w WHERE w.beat_ms > :since OR EXISTS"
            " (SELECT 1 FROM slice s WHERE s.worker = w.id AND s.state = 'open'"
            " AND s.expires_ms > :now)"
        ),
        {"since": now - LIVE_MS, "now": now},
    )
    return {row.id: row.change_seen for row in rows}


def prune(connection: Writing) -> None:
    """Forget workers that have been silent for longer than any slice of theirs lasts."""
    connection.execute(
        text("DELETE FROM worker WHERE beat_ms < :before"),
        {"before": now_ms(connection) - FORGET_MS},
    )
