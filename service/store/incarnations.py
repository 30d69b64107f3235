"""Which life of the database this is: renewed when acknowledged commits may have been lost.

Tickets carry it, so that a bid of another life is never booked on a slice of this one.
"""

from __future__ import annotations

import secrets

from sqlalchemy import text

from service.store.database import Writing, locking
from service.store.facts import fact
from service.store.journal import note

TIMELINE = "timeline"
# The server and its timeline: a fail-over and a copy on another server change it.
_WHERE = (
    "SELECT (SELECT system_identifier FROM pg_control_system())"
    " || '/' || substr(pg_walfile_name(pg_current_wal_lsn()), 1, 8)"
)


def current(connection: Writing) -> str:
    """The incarnation in hex; on PostgreSQL renewed first when the timeline has changed."""
    if connection.dialect.name == "sqlite":
        return fact(connection, "incarnation")
    here = str(connection.execute(text(_WHERE)).scalar_one())
    connection.execute(_ADD, {"name": TIMELINE, "value": here})
    # Locked, so that of two workers that start at once only one begins a new life.
    before = str(connection.execute(locking(connection, _TIMELINE)).scalar_one())
    if before != here:
        renew(connection, f"timeline {before} became {here}")
        connection.execute(_SET, {"name": TIMELINE, "value": here})
    return fact(connection, "incarnation")


def renew(connection: Writing, reason: str) -> str:
    """Begin a new life; tickets of the one before take the late way from here on."""
    was, fresh = fact(connection, "incarnation"), secrets.token_hex(8)
    connection.execute(_SET, {"name": "incarnation", "value": fresh})
    seen_ms = connection.execute(text("SELECT seen_ms FROM service_clock")).scalar_one()
    note(
        connection, wall_ms=int(seen_ms), actor="bidkeel", action="renew", line_item="*",
        reason=reason, detail={"before": was, "after": fresh},
    )  # fmt: skip
    return fresh


_ADD = text("INSERT INTO fact (name, value) VALUES (:name, :value) ON CONFLICT DO NOTHING")
_SET = text("UPDATE fact SET value = :value WHERE name = :name")
_TIMELINE = "SELECT value FROM fact WHERE name = 'timeline'"
