"""V1 to V7: does the database still say what was promised? Each check is one statement.

V8 (no unfunded cost while every delay stays within grace) is reported as a figure, since
only the feed knows its own delays.
"""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from typing import Self

from sqlalchemy import text

from service.ledger.replay import Replayed, replay
from service.store.changes import announce
from service.store.database import Database, Reading, Writing
from service.store.freezes import put
from service.store.journal import note

# The few slices that may hold money, each through its own index: a closed one has nothing
# remaining, by a constraint, and there may be very many of them.
HOLDING = (
    "WITH holding AS (SELECT line_item, day, remaining + owed AS rest FROM slice"
    " WHERE state <> 'closed' UNION ALL SELECT line_item, day, owed FROM slice"
    " WHERE owed > 0 AND state = 'closed') "
)
# Balances, days and such slices only: cheap enough to be asked while money moves.
STANDING = {
    "V1 spent + held <= budget": (
        "SELECT line_item, spent + held - budget AS off FROM balance WHERE spent + held > budget"
    ),
    "V1 spent + held <= the day's budget": (
        "SELECT line_item, spent + held - budget AS off FROM local_day WHERE spent + held > budget"
    ),
    "V1 the budget is the target, or what is out already": (
        "SELECT line_item, budget - target AS off FROM balance WHERE budget <>"
        " CASE WHEN target > spent + held THEN target ELSE spent + held END"
    ),
    "V1 the day's budget is its target, or what is out already": (
        "SELECT line_item, budget - target AS off FROM local_day WHERE budget <>"
        " CASE WHEN target > spent + held THEN target ELSE spent + held END"
    ),
    "V2 held = sum of what slices hold": (
        "SELECT b.line_item, b.held - coalesce(s.total, 0) AS off FROM balance b LEFT JOIN"
        " (SELECT line_item, sum(rest) AS total FROM holding GROUP BY line_item) s"
        " ON s.line_item = b.line_item WHERE b.held <> coalesce(s.total, 0)"
    ),
    "V2 the day's held = sum of what its slices hold": (
        "SELECT d.line_item, d.held - coalesce(s.total, 0) AS off FROM local_day d LEFT JOIN"
        " (SELECT line_item, day, sum(rest) AS total FROM holding GROUP BY line_item, day) s"
        " ON s.line_item = d.line_item AND s.day = d.day"
        " WHERE d.held <> coalesce(s.total, 0)"
    ),
}
# All slices and whole streams: asked by the command.
WHOLE = {
    "V3 accepted costs - reversals = spent + unfunded + disputed": (
        "SELECT b.line_item, b.spent + b.unfunded + b.disputed - coalesce(s.total, 0) AS off"
        " FROM balance b LEFT JOIN (SELECT line_item,"
        " sum(CASE kind WHEN 'reversal' THEN -cost ELSE cost END) AS total FROM stream"
        " GROUP BY line_item) s ON s.line_item = b.line_item"
        " WHERE b.spent + b.unfunded + b.disputed <> coalesce(s.total, 0)"
    ),
    "V4 no slot booked twice": (
        "SELECT line_item, count(*) AS off FROM stream WHERE slot IS NOT NULL"
        " GROUP BY line_item, bid, slot HAVING count(*) > 1"
    ),
    "V5 seq gapless": (
        "SELECT b.line_item, b.seq - count(s.seq) AS off FROM balance b LEFT JOIN stream s"
        " ON s.line_item = b.line_item GROUP BY b.line_item, b.seq"
        " HAVING count(s.seq) <> b.seq OR coalesce(max(s.seq), 0) <> b.seq"
    ),
    "V6 0 <= remaining and remaining + owed <= amount": (
        "SELECT line_item, remaining AS off FROM slice"
        " WHERE remaining < 0 OR owed < 0 OR remaining + owed > amount"
    ),
}
CHECKS = STANDING | WHOLE


@dataclass(frozen=True, slots=True)
class Finding:
    """One broken promise of one line item and by how much (nanos or rows) it is off."""

    check: str
    line_item: str
    off: int


def audit(connection: Reading) -> list[Finding]:
    """Every difference found; an empty list means that V1 to V7 hold."""
    if connection.dialect.name == "postgresql":
        # Long streams take long to replay; a reader holds no lock that anybody waits for.
        for limit in ("statement_timeout", "idle_in_transaction_session_timeout"):
            connection.execute(text(f"SET LOCAL {limit} = 0"))
    found = _checked(connection, CHECKS)
    return found + [f for name in _line_items(connection) for f in _replayed(connection, name)]


def freeze_broken(database: Database) -> list[str]:
    """Freeze the line items whose standing promises are broken; returns those newly frozen."""
    found = database.read(lambda connection: _checked(connection, STANDING))
    if not found:
        return []
    return database.write(lambda connection: freeze_found(connection, found, database.wall_ms()))


def freeze_found(connection: Writing, found: list[Finding], wall_ms: int) -> list[str]:
    """Freeze what the findings are about, each with its difference in the journal."""
    # Reversed, so that the first finding of a line item is the reason that stays.
    reasons = {f.line_item: f"{f.check}: off by {f.off}" for f in reversed(found)}
    frozen = [
        name
        for name, reason in sorted(reasons.items())
        if put(connection, name, "audit", wall_ms=wall_ms, actor="bidkeel", reason=reason)
    ]
    for name in frozen:
        detail = {"findings": [asdict(f) for f in found if f.line_item == name]}
        note(
            connection, wall_ms=wall_ms, actor="bidkeel", action="freeze",
            line_item=name, reason="audit", detail=detail,
        )  # fmt: skip
    if frozen:
        announce(connection, "freeze", frozen)
    return frozen


def _checked(connection: Reading, checks: dict[str, str]) -> list[Finding]:
    return [
        # PostgreSQL gives sums of integers as decimals.
        Finding(name, row.line_item, int(row.off))
        for name, statement in checks.items()
        for row in connection.execute(text(HOLDING + statement))
    ]


def unfunded(connection: Reading) -> int:
    """V8's figure: the sum of costs that found no free money, in nanos."""
    return int(
        connection.execute(text("SELECT coalesce(sum(unfunded), 0) FROM balance")).scalar_one()
    )


def _line_items(connection: Reading) -> list[str]:
    return [row.line_item for row in connection.execute(text("SELECT line_item FROM balance"))]


@dataclass(frozen=True, slots=True)
class Balance:
    """A balance row as the replay must find it, and how wins are spent; money in nanos."""

    line_item: str
    seq: int
    spent: int
    held: int
    unfunded: int
    disputed: int
    budget: int
    spend_on: str

    @classmethod
    def read(cls, connection: Reading, line_item: str) -> Self:
        """The balance of one line item."""
        row = connection.execute(
            text(
                "SELECT b.target, b.seq, b.spent, b.held, b.unfunded, b.disputed, i.config"
                " FROM balance b JOIN line_item i ON i.id = b.line_item WHERE b.line_item = :id"
            ),
            {"id": line_item},
        ).one()
        sums = (row.seq, row.spent, row.held, row.unfunded, row.disputed, row.target)
        return cls(line_item, *sums, json.loads(row.config)["spend_on"])


def compared(connection: Reading, balance: Balance, books: Replayed) -> list[Finding]:
    """Where a replay of the whole stream and the balances of its line item differ."""
    found = [
        Finding(
            f"V7 replayed {name} equals {name}",
            balance.line_item,
            getattr(balance, name) - getattr(books, name),
        )
        for name in ("budget", "spent", "held", "unfunded", "disputed")
    ]
    strange = Finding("V7 every slice was leased", balance.line_item, books.strange)
    found += [strange, *_compared_days(connection, balance.line_item, books.days)]
    return [finding for finding in found if finding.off]


def unreplayable(line_item: str) -> Finding:
    """What is found of a stream with a row that cannot be read."""
    return Finding("V7 the stream can be replayed", line_item, 1)


def _replayed(connection: Reading, line_item: str) -> list[Finding]:
    balance = Balance.read(connection, line_item)
    entries = connection.execute(
        text("SELECT kind, bid, body FROM stream WHERE line_item = :id ORDER BY seq"),
        {"id": line_item},
    )
    try:
        told = [(e.kind, bytes(e.bid).hex() if e.bid else "", json.loads(e.body)) for e in entries]
        books = replay(balance.spend_on, told)
    except (ValueError, LookupError, TypeError, AttributeError):
        # A damaged row must not keep the other line items from being audited.
        return [unreplayable(line_item)]
    return compared(connection, balance, books)


def _compared_days(
    connection: Reading, line_item: str, told: dict[str, list[int]]
) -> list[Finding]:
    rows = connection.execute(
        text("SELECT day, spent + over_spent AS cost FROM local_day WHERE line_item = :id"),
        {"id": line_item},
    )
    name, found = "V7 replayed day's spent equals the day's spent", list[Finding]()
    for row in rows:
        least, unsure = told.get(row.day, (0, 0))
        # A restore may lose a day's row: a ticket from before it then found no day to count on.
        if not least <= row.cost <= least + unsure:
            found.append(Finding(name, line_item, row.cost - least))
    return found
