"""The audit that goes on from the last audited seq, piece by piece, while money moves.

Each piece reads one consistent view. Several clerks may do the same piece; it is kept once.
"""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import LargeBinary, text

from service.ledger.replay import Told, replay
from service.ledger.resuming import packed, recall, unpacked
from service.store import bodies
from service.store.audit import Balance, Finding, compared, freeze_found, unreplayable
from service.store.clock import now_ms
from service.store.database import Database, Reading, Writing, among

ENTRIES_MAX = 2000
SLICES_MAX = 2000

Standing = tuple[Any, ...]


@dataclass(frozen=True, slots=True)
class Piece:
    """
    What one piece of a stream told.

    Args:
        found: What disagrees.
        whole: Whether it came to the end of the stream.
        row: How far it came, to be kept.
    """

    line_item: str
    found: list[Finding]
    whole: bool
    row: dict[str, Any]


def standings(connection: Reading) -> dict[str, Standing]:
    """Where each line item stands; one that stands as it did when it was audited is as sound."""
    rows = connection.execute(
        text(
            "SELECT b.line_item, b.seq, b.target, b.spent, b.held, b.unfunded, b.disputed,"
            " d.spent AS day_spent, d.over_spent FROM balance b LEFT JOIN (SELECT line_item,"
            " sum(spent) AS spent, sum(over_spent) AS over_spent FROM local_day"
            " GROUP BY line_item) d ON d.line_item = b.line_item ORDER BY b.line_item"
        )
    )
    return {row.line_item: tuple(row)[1:] for row in rows}


def audit_on(
    database: Database, line_items: Sequence[str], entries_max: int = ENTRIES_MAX
) -> tuple[list[Piece], list[str]]:
    """
    Audit the next piece of each of these streams (V3, V4, V5 and V7), and freeze what disagrees.

    Kept in one transaction, for a commit costs more than a short piece; together they read no
    more entries than one may alone.

    Returns:
        What each piece told, and what is newly frozen for it.
    """
    limit = max(1, entries_max // len(line_items))
    pieces = database.read(lambda c: [_piece(c, name, limit) for name in line_items])
    # What disagrees is not kept, so every turn finds it again until somebody has mended it.
    sound = [piece.row for piece in pieces if not piece.found]
    if moved := [row for row in sound if row["seq"] > row["was"]]:
        database.write(lambda connection: connection.execute(_KEEP, moved))
    found = [finding for piece in pieces for finding in piece.found]
    if not found:
        return pieces, []
    wall_ms = database.wall_ms()
    return pieces, database.write(lambda connection: freeze_found(connection, found, wall_ms))


def prune_slices(connection: Writing, keep_ms: int) -> int:
    """
    Forget closed slices that have been closed for so long and that the audit has passed.

    What is not closed in the audited books, or came after them, stays; so does what owes.
    """
    rows = connection.execute(text("SELECT line_item, service_ms, books FROM audited")).all()
    now = now_ms(connection)
    return sum(
        connection.execute(
            _PRUNE,
            {
                "id": row.line_item,
                "audited": row.service_ms,
                "before": now - keep_ms,
                "open": [bytes.fromhex(name) for name in json.loads(row.books)["slices"]],
                "limit": SLICES_MAX,
            },
        ).rowcount
        for row in rows
    )


def _piece(connection: Reading, line_item: str, entries_max: int) -> Piece:
    kept = connection.execute(_KEPT, {"id": line_item}).one_or_none()
    was, cost = (kept.seq, kept.cost) if kept else (0, 0)
    balance = Balance.read(connection, line_item)
    wanted = {"id": line_item, "was": was, "limit": entries_max}
    rows: list[Any] = list(connection.execute(_NEXT, wanted))
    before = _before(connection, line_item, was, {bytes(row.bid) for row in rows if row.bid})
    # Of a stream that is not whole a replay would tell nothing.
    if found := _gaps(line_item, balance.seq, was, rows) + _doubles(line_item, [*before, *rows]):
        return Piece(line_item, found, True, {})
    books = unpacked(json.loads(kept.books) if kept else {})
    try:
        recall(books, _told(before))
        books = replay(balance.spend_on, _told(rows), books)
    except (ValueError, LookupError, TypeError, AttributeError):
        # A damaged row must not keep the other line items from being audited.
        return Piece(line_item, [unreplayable(line_item)], True, {})
    cost += sum(row.cost for row in rows)
    seq = was + len(rows)
    # Only where the stream ends must the books be those of the balances.
    if whole := seq == balance.seq:
        found = _costs(balance, cost) + compared(connection, balance, books)
    service_ms = rows[-1].service_ms if rows else 0
    kept_books = json.dumps(packed(books), separators=(",", ":"))
    row = {"id": line_item, "was": was, "seq": seq, "service_ms": service_ms}
    return Piece(line_item, found, whole, row | {"cost": cost, "books": kept_books})


def _before(connection: Reading, line_item: str, was: int, bids: set[bytes]) -> list[Any]:
    """What earlier pieces have read of these bids."""
    if not was or not bids:
        return []
    rows = {"id": line_item, "was": was, "ids": sorted(bids)}
    return list(connection.execute(_BEFORE, rows))


def _told(rows: list[Any]) -> list[Told]:
    return [(r.kind, bytes(r.bid).hex() if r.bid else "", bodies.parsed(r.body)) for r in rows]


def _gaps(line_item: str, last: int, was: int, rows: list[Any]) -> list[Finding]:
    numbers = [row.seq for row in rows]
    gapless = numbers == list(range(was + 1, was + 1 + len(rows)))
    if gapless and was + len(rows) <= last and (rows or was == last):
        return []
    return [Finding("V5 seq gapless", line_item, last - (numbers[-1] if numbers else was))]


def _doubles(line_item: str, rows: list[Any]) -> list[Finding]:
    counted = Counter((bytes(r.bid), r.slot) for r in rows if r.slot is not None and r.bid)
    most = max(counted.values(), default=0)
    return [Finding("V4 no slot booked twice", line_item, most)] if most > 1 else []


def _costs(balance: Balance, cost: int) -> list[Finding]:
    off = balance.spent + balance.unfunded + balance.disputed - cost
    name = "V3 accepted costs = spent + unfunded + disputed"
    return [Finding(name, balance.line_item, off)] if off else []


_KEPT = text("SELECT seq, cost, books FROM audited WHERE line_item = :id")
_NEXT = text(
    "SELECT seq, kind, service_ms, bid, slot, cost, body FROM stream"
    " WHERE line_item = :id AND seq > :was ORDER BY seq LIMIT :limit"
)
_BEFORE = among(
    "SELECT kind, bid, slot, body FROM stream WHERE bid IN :ids AND line_item = :id"
    " AND seq <= :was ORDER BY seq",
    of=LargeBinary,
)
_KEEP = text(
    "INSERT INTO audited (line_item, seq, service_ms, cost, books)"
    " VALUES (:id, :seq, :service_ms, :cost, :books) ON CONFLICT (line_item) DO UPDATE"
    " SET seq = excluded.seq, service_ms = excluded.service_ms, cost = excluded.cost,"
    # Another clerk may have kept this piece, or a longer one.
    " books = excluded.books WHERE audited.seq = :was"
)
_PRUNE = among(
    "DELETE FROM slice WHERE id IN (SELECT id FROM slice WHERE line_item = :id"
    " AND state = 'closed' AND owed = 0 AND billing_close_ms < :before"
    " AND leased_ms < :audited AND id NOT IN :open LIMIT :limit)",
    "open",
    LargeBinary,
)
