"""Learner states as bytes: the current snapshot, and the one teacher who moves it on."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import Any

from sqlalchemy import text

from service.errors import PoisonLesson
from service.ledger.cancelling import ALL
from service.ledger.entries import Entry
from service.store import epochs, lessons
from service.store.books import Books
from service.store.changes import announce
from service.store.database import Database, Reading, Writing, among, locking
from service.store.decisions import quarantine
from service.store.journal import note
from service.store.leases import read_configs
from service.store.lessons import Lesson

__all__ = ["Fold", "Lesson"]

Fold = Callable[[bytes, list[Lesson], dict[str, Any]], bytes]
Lawful = Callable[[bytes, dict[str, Any]], bytes | None]
ENTRIES_MAX = 2000
STATES_MAX = 200  # Read at once; each may be 64 KiB.
TRIES_MAX = 3  # So often a lesson may fail before it is set aside.


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


def lawless(state: bytes, config: dict[str, Any]) -> bytes | None:
    """No law: what a method that draws nothing bids by."""
    return None


@dataclass(frozen=True, slots=True)
class _Taught:
    """What one turn of the teacher came to; `poison` is the seq that it could not take."""

    read: int
    published: bool = False
    poison: int = 0
    tries: int = 0
    error: str = ""


def teach(
    database: Database,
    line_item: str,
    fold: Fold,
    checkpoint_entries: int,
    lawful: Lawful = lawless,
) -> int:
    """Fold the next entries of one line item; returns how many were read."""
    return teach_together(database, [line_item], fold, checkpoint_entries, lawful)[line_item]


def teach_together(
    database: Database,
    line_items: Sequence[str],
    fold: Fold,
    checkpoint_entries: int,
    lawful: Lawful = lawless,
) -> dict[str, int]:
    """
    Fold the next entries of each line item into its one state; returns how many were read of each.

    In one transaction, for a commit costs more than a short lesson; together they read no more
    than one may alone. One teacher at a time: a learner's row is locked, and another teacher
    passes by. An entry that fails is set aside after three turns, and teaching goes on behind it.

    Args:
        fold: Pure; state, lessons and the line item's configuration in, state out.
        checkpoint_entries: A checkpoint is kept whenever seq passes a multiple of it.
        lawful: State and configuration in, the law that bids are drawn from out, if any.
    """
    limit = share_of(len(line_items))

    def work(connection: Writing) -> dict[str, _Taught]:
        rules = (fold, checkpoint_entries, lawful, limit, database.wall_ms())
        found = {name: _teach(connection, name, *rules) for name in sorted(line_items)}
        # The change number last: its one row is what every writer waits for.
        if published := [name for name, taught in found.items() if taught.published]:
            announce(connection, "snapshot", published)
        return found

    taught = database.write(work)
    for name, one in taught.items():
        if one.tries >= TRIES_MAX:
            # Apart: the stream is locked before the learner, and here the learner was first.
            aside = partial(_set_aside, line_item=name, taught=one, now=database.wall_ms())
            database.write(aside)
    return {name: one.read for name, one in taught.items()}


def share_of(line_items: int) -> int:
    """How many entries are read of each of so many line items taught together."""
    return max(1, ENTRIES_MAX // line_items)


def _teach(
    connection: Writing,
    line_item: str,
    fold: Fold,
    every: int,
    lawful: Lawful,
    limit: int,
    now: int,
) -> _Taught:
    row = connection.execute(locking(connection, _MINE, skip=True), {"id": line_item}).one_or_none()
    if row is None:
        return _Taught(0)
    # Read under the lock, for a change of terms refolds under it too.
    config = read_configs(connection, [line_item])[line_item]
    cancelled = lessons.cancellations(connection, line_item, config["spend_on"])
    page = lessons.read(connection, line_item, row.seq, limit, cancelled)
    taught, seq = _Taught(page.read), page.end
    try:
        state = fold(bytes(row.working), page.lessons, config)
    except PoisonLesson as poison:
        # The fold is pure, so the part before the bad entry is simply folded again.
        state = fold(bytes(row.working), page.lessons[: poison.place], config)
        seq = page.seqs[poison.place] - 1
        # Counted for this one entry: the next bad one gets turns of its own.
        tries = row.tries + 1 if row.stuck_seq == seq + 1 else 1
        taught = _Taught(seq - row.seq, False, seq + 1, tries, str(poison))
    stuck = {"stuck": taught.poison, "tries": taught.tries}
    connection.execute(_LEARN, {"id": line_item, "seq": seq, "state": state, **stuck})
    if seq // every > row.seq // every:
        _checkpoint(connection, line_item, seq, state, now)
    # A state that has not caught up is not published, or a refold would forget in public.
    caught_up = taught.read < limit and not (taught.poison and row.halted)
    # What has not changed is not published, since every worker would load it for nothing.
    if caught_up and (row.halted or digest_of(state) != row.digest):
        _publish(connection, line_item, seq, state, now)
        if (law := lawful(state, config)) is not None:
            epochs.keep(connection, line_item, seq, law)
        return replace(taught, published=True)
    return taught


def _set_aside(connection: Writing, line_item: str, taught: _Taught, now: int) -> None:
    """Let an entry teach nothing that the fold cannot take; people may try it again."""
    books = Books(connection, [line_item], now)
    row = connection.execute(locking(connection, _MINE), {"id": line_item}).one()
    # Another teacher may have got past it since, or set it aside already.
    if (row.stuck_seq, row.tries >= TRIES_MAX) != (taught.poison, True):
        return
    body = {"entry": taught.poison, "error": taught.error}
    books.post(line_item, Entry("quarantine", body))
    books.save()
    by_seq = books.accounts[line_item].seq
    lessons.cancel(connection, line_item, by_seq, ALL, [(taught.poison, taught.poison, ALL)])
    quarantine(connection, line_item, taught.error, {"event": "Lesson"}, now, taught.poison)
    unstuck = {"seq": row.seq, "state": bytes(row.working), "stuck": 0, "tries": 0}
    connection.execute(_LEARN, {"id": line_item, **unstuck})
    note(
        connection, wall_ms=now, actor="bidkeel", action="quarantine", line_item=line_item,
        reason="a lesson could not be learnt", detail=body,
    )  # fmt: skip


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
    connection.execute(_LEARN, row)
    # Checkpoints under the old terms would make a later rebuild differ from a fold from zero.
    connection.execute(text("DELETE FROM checkpoint WHERE line_item = :id"), {"id": line_item})


def begin_afresh(connection: Writing, line_item: str, seq: int) -> None:
    """Note the seq of a reset: what was won before it teaches nothing more."""
    connection.execute(
        text("UPDATE learner SET reset_seq = :seq WHERE line_item = :id"),
        {"seq": seq, "id": line_item},
    )


def _publish(connection: Writing, line_item: str, seq: int, state: bytes, now: int) -> None:
    row = {"seq": seq, "state": state, "digest": digest_of(state), "now": now, "id": line_item}
    connection.execute(_PUBLISH, row)


def _checkpoint(connection: Writing, line_item: str, seq: int, state: bytes, now: int) -> None:
    # A damaged one of the same seq is mended by the way.
    connection.execute(
        text(
            "INSERT INTO checkpoint (line_item, seq, state, digest, at_ms)"
            " VALUES (:id, :seq, :state, :digest, :now) ON CONFLICT (line_item, seq)"
            " DO UPDATE SET state = excluded.state, digest = excluded.digest"
        ),
        {"id": line_item, "seq": seq, "state": state, "digest": digest_of(state), "now": now},
    )


_MINE = "SELECT seq, working, digest, halted, stuck_seq, tries FROM learner WHERE line_item = :id"
_LEARN = text(
    "UPDATE learner SET seq = :seq, working = :state, stuck_seq = :stuck, tries = :tries"
    " WHERE line_item = :id"
)
_PUBLISH = text(
    "UPDATE learner SET snapshot = :seq, state = :state, digest = :digest, published_ms = :now,"
    " halted = 0 WHERE line_item = :id"
)
