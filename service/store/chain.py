"""The chain of the journal: every row carries the hash of the one before; apart from its rows.

Rows are sealed last in their transaction, under the lock of the one row `journal_head`, which
is taken after every other lock, the change number's too; whoever holds it waits for nobody.
Rows without a seal, of a release before this one, are adopted: sealed by the next transaction
that seals its own, and marked. That door is open only while a worker of that release may live.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing, among, locking

START = "0" * 64  # What the first row carries in place of a hash before it.
PAGE_ROWS = 1000
_SAID = ("number", "at_ms", "actor", "action", "line_item", "reason", "detail")


@dataclass(frozen=True, slots=True)
class Verdict:
    """
    What a walk along the chain has found.

    Args:
        rows: Sealed rows that were read.
        adopted: Rows among them that were written without a seal, by an earlier release.
        unsealed: Rows that still wait for their seal.
        head: Hash of the last row, to be kept elsewhere.
        number: The first broken row, None when the chain is whole.
        broken: What is wrong with it, None when the chain is whole.
    """

    rows: int
    adopted: int
    unsealed: int
    head: str
    number: int | None = None
    broken: str | None = None


def link_hash(previous: str, link: int, row: Any, *, adopted: bool) -> str:
    """The hash of one row: of all it says, its place, and the hash before it."""
    said = [previous, link, int(adopted), *(getattr(row, name) for name in _SAID)]
    # ASCII only, so that no library's notion of text can change what was hashed.
    canonical = json.dumps(said, ensure_ascii=True, separators=(",", ":"))
    return hashlib.sha256(canonical.encode("ascii")).hexdigest()


def seal(connection: Writing) -> None:
    """Seal what this transaction has noted, and before it what earlier releases left unsealed."""
    head = connection.execute(locking(connection, _HEAD)).one()
    elders = json.loads(head.elders)
    link, last, sealed = int(head.link), str(head.hash), []
    for row in connection.execute(_UNSEALED):
        # Of our own kind only this very transaction can see rows that are not sealed yet.
        adopted = row.hash is None
        if adopted and not elders:
            continue
        link, previous = link + 1, last
        last = link_hash(previous, link, row, adopted=adopted)
        place = {"link": link, "previous": previous, "hash": last, "adopted": int(adopted)}
        sealed.append({"number": row.number, **place})
    if sealed:
        connection.execute(_SEAL, sealed)
    if elders:
        elders = list(connection.execute(_ELDERS, {"ids": elders}).scalars())
    connection.execute(_MOVE, {"link": link, "hash": last, "elders": json.dumps(elders)})


def verify(connection: Reading, remembered: str | None = None) -> Verdict:
    """
    Walk along the whole chain and name the first row that breaks it.

    Args:
        remembered: A head that somebody kept; rows cut off the end are seen only against it.
    """
    link, last, adopted, met = 0, START, 0, remembered in (None, START)
    head = connection.execute(text(_HEAD)).one()
    waiting = list(connection.execute(_WAITING))
    while rows := connection.execute(_NEXT, {"link": link, "limit": PAGE_ROWS}).all():
        for row in rows:
            if (broken := _broken(row, link, last)) is not None:
                return Verdict(link, adopted, len(waiting), last, row.number, broken)
            link, last, adopted = row.link, row.hash, adopted + row.adopted
            met = met or last == remembered
    number, broken = _end(link, last, head, waiting)
    if broken is None and not met:
        number, broken = None, "the remembered head is not in it: rows were cut off or rewritten"
    return Verdict(link, adopted, len(waiting), last, number, broken)


def _broken(row: Any, link: int, last: str) -> str | None:
    # Its own words first: a row that was altered breaks the place of those behind it, too.
    if link_hash(row.previous or "", row.link, row, adopted=bool(row.adopted)) != row.hash:
        return "altered: what it says is not what was sealed"
    if row.link != link + 1:
        return f"{row.link - link - 1} rows before it were removed"
    if row.previous != last:
        return "a row before it was inserted, removed or put elsewhere"
    return None


def _end(link: int, last: str, head: Any, waiting: list[Any]) -> tuple[int | None, str | None]:
    if (head.link, head.hash) != (link, last):
        return None, f"{max(0, head.link - link)} rows were removed from its end"
    # While a worker of the release before may live, rows without a seal are expected.
    forged = [row.number for row in waiting if row.hash is not None or head.elders == "[]"]
    return (forged[0], "inserted: it carries no seal") if forged else (None, None)


_COLUMNS = ", ".join(_SAID)
_HEAD = "SELECT link, hash, elders FROM journal_head WHERE id = 1"
_UNSEALED = text(
    f"SELECT {_COLUMNS}, hash FROM journal WHERE link IS NULL ORDER BY number"  # noqa: S608
)
# A bound against rows forged in bulk; one of them is enough to say so.
_WAITING = text("SELECT number, hash FROM journal WHERE link IS NULL ORDER BY number LIMIT 1000")
_NEXT = text(
    f"SELECT {_COLUMNS}, link, previous, hash, adopted FROM journal"  # noqa: S608
    " WHERE link > :link ORDER BY link LIMIT :limit"
)
_SEAL = text(
    "UPDATE journal SET link = :link, previous = :previous, hash = :hash, adopted = :adopted"
    " WHERE number = :number AND link IS NULL"
)
_ELDERS = among("SELECT id FROM worker WHERE id IN :ids ORDER BY id")
_MOVE = text("UPDATE journal_head SET link = :link, hash = :hash, elders = :elders WHERE id = 1")
