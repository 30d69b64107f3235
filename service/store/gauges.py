"""Sums over all line items for the metrics: one consistent view, read by the clerk."""

from __future__ import annotations

from typing import Any

from sqlalchemy import text

from service.store.changes import latest
from service.store.clock import now_ms
from service.store.database import Reading
from service.store.facts import fact
from service.store.workers import live

PARTS = ("budget", "spent", "held", "unfunded", "disputed")
SOURCES = ("person", "tripwire", "audit", "all", "restore", "closed")
STATES = ("open", "retired")


def measure(connection: Reading, wall_ms: int) -> dict[str, Any]:
    """Everything that the database alone can tell; money in nanos, as text."""
    now = now_ms(connection)
    entries, oldest_ms = _unread(connection)
    return {
        "money": _money(connection),
        "freezes": _counts(connection, _FREEZES, SOURCES),
        "slices": _counts(connection, _SLICES, STATES),
        "line_items": _one(connection, "SELECT count(*) FROM line_item"),
        "learner_lag_entries": entries,
        # Milliseconds, as everywhere in the store; the exposition scales them to what it says.
        "learner_lag_seconds": 0 if oldest_ms is None else max(0, now - oldest_ms),
        "halted_learners": _one(
            connection, "SELECT count(*) FROM learner WHERE halted = 1 OR tries > 0"
        ),
        "change_lag_changes": _behind(connection),
        "live_workers": len(live(connection)),
        "quarantined_outcomes": _one(
            connection, "SELECT count(*) FROM quarantine WHERE state = 'waiting'"
        ),
        "tripwires_firing": _firing(connection),
        "service_clock_seconds": now,
        "ledger_read_timestamp_seconds": wall_ms,
        "incarnation": fact(connection, "incarnation"),
    }


def _money(connection: Reading) -> dict[str, dict[str, str]]:
    """Sums per currency, exact."""
    sqlite = connection.dialect.name == "sqlite"
    currency = "json_extract(l.config, '$.currency')" if sqlite else "l.config::json ->> 'currency'"
    # Whole units and nanos apart: the sum of a few thousand budgets may not fit 64 bits.
    columns = ", ".join(
        f"sum(b.{part} / 1000000000) AS {part}_units, sum(b.{part} % 1000000000) AS {part}_nanos"
        for part in PARTS
    )
    statement = text(
        f"SELECT {currency} AS currency, {columns} FROM balance b"  # noqa: S608 - Words of our own.
        f" JOIN line_item l ON l.id = b.line_item GROUP BY {currency} ORDER BY {currency}"
    )
    rows = [row._mapping for row in connection.execute(statement)]
    return {
        row["currency"]: {
            part: str(int(row[f"{part}_units"]) * 10**9 + int(row[f"{part}_nanos"]))
            for part in PARTS
        }
        for row in rows
    }


def _firing(connection: Reading) -> dict[str, int]:
    """Open findings by rule."""
    rows = connection.execute(
        text(
            "SELECT rule, count(*) AS findings FROM tripwire_finding"
            " WHERE cleared_ms IS NULL GROUP BY rule"
        )
    )
    return {row.rule: int(row.findings) for row in rows}


def _unread(connection: Reading) -> tuple[int, int | None]:
    """Entries that no learner has read, and the service time of the oldest."""
    row = connection.execute(
        text(
            "SELECT coalesce(sum(b.seq - l.seq), 0) AS entries, min(s.service_ms) AS oldest"
            " FROM balance b JOIN learner l ON l.line_item = b.line_item"
            " JOIN stream s ON s.line_item = l.line_item AND s.seq = l.seq + 1"
            " WHERE b.seq > l.seq"
        )
    ).one()
    return int(row.entries), None if row.oldest is None else int(row.oldest)


def _behind(connection: Reading) -> int:
    # Without a live worker nobody is behind; that there is none is told by its own gauge.
    seen = live(connection).values()
    return max(0, latest(connection) - min(seen)) if seen else 0


def _counts(connection: Reading, statement: str, names: tuple[str, ...]) -> dict[str, int]:
    """How often each name occurs; those that do not are there with nought."""
    found = {row.name: int(row.n) for row in connection.execute(text(statement))}
    return {name: found.get(name, 0) for name in names}


def _one(connection: Reading, statement: str) -> int:
    return int(connection.execute(text(statement)).scalar_one())


_FREEZES = "SELECT source AS name, count(*) AS n FROM freezing GROUP BY source"
_SLICES = "SELECT state AS name, count(*) AS n FROM slice WHERE state <> 'closed' GROUP BY state"
