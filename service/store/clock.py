"""Service time: a clock of our own that stands still while we are away.

Grace and value windows count it, so an outage or a step of the wall clock closes nothing.
"""

from __future__ import annotations

from sqlalchemy import text

from service.store.database import Database, Reading, Writing

# Workers tick once a second; what is much longer was an outage, in which nothing ages.
STEP_MS_MAX = 2000


def advance(connection: Writing, wall_ms: int, step_ms_max: int = STEP_MS_MAX) -> int:
    """Move service time on by what the wall clock shows, at most a step, never back."""
    seen = text("SELECT now_ms, seen_ms FROM service_clock WHERE id = 1")
    row = connection.execute(seen).one()
    # Back never; forward at most a step: after an outage nothing has aged by the outage.
    step = min(max(0, wall_ms - row.seen_ms), step_ms_max)
    # Guarded by what was seen: of two workers that tick at once only one moves the clock.
    connection.execute(
        text(
            "UPDATE service_clock SET now_ms = now_ms + :step, seen_ms = :wall"
            " WHERE id = 1 AND seen_ms = :seen"
        ),
        {"step": step, "wall": wall_ms, "seen": row.seen_ms},
    )
    return int(row.now_ms + step)


def wall_clock(connection: Writing, database: Database) -> int:
    """The one wall clock all workers of a database share: the database's own."""
    # Workers' own clocks may differ by minutes; the slowest would hold all the others' grace.
    if database.is_sqlite:
        return database.wall_ms()
    now = text("SELECT CAST(extract(epoch FROM clock_timestamp()) * 1000 AS BIGINT)")
    return int(connection.execute(now).scalar_one())


def now_ms(connection: Reading | Writing) -> int:
    """Service time in milliseconds."""
    return int(connection.exec_driver_sql("SELECT now_ms FROM service_clock").scalar_one())
