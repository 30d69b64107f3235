"""The one teacher who moves a learner on; apart from the states themselves and who reads them."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any, NamedTuple

from sqlalchemy import text

from service.errors import PoisonLesson
from service.ledger.cancelling import ALL
from service.ledger.entries import Entry
from service.store import epochs, lessons
from service.store.books import Books
from service.store.changes import SNAPSHOT, announce
from service.store.database import Database, Writing, locking
from service.store.decisions import quarantine
from service.store.driver import update_many
from service.store.journal import note
from service.store.learners import LEARN, digest_of
from service.store.leases import read_configs
from service.store.lessons import Lesson, Page

Fold = Callable[[bytes, list[Lesson], dict[str, Any]], bytes]
Lawful = Callable[[bytes, dict[str, Any]], bytes | None]
ENTRIES_MAX = 2000
TRIES_MAX = 3  # So often a lesson may fail before it is set aside.


def lawless(state: bytes, config: Mapping[str, Any]) -> bytes | None:
    """No law: what a method that draws nothing bids by."""
    return None


@dataclass(frozen=True, slots=True)
class _Rules:
    """What every turn of a teacher goes by; see `teach_together`."""

    fold: Fold
    every: int
    lawful: Lawful
    limit: int
    now_ms: int


class _Taught(NamedTuple):
    """
    What one turn came to.

    Args:
        read: How many entries were read, up to `seq`.
        law: What bids are drawn from by the state; only of one that is published.
        poison: The seq that could not be taken, after so many tries.
    """

    read: int
    seq: int
    state: bytes
    digest: str
    published: bool
    checkpoint: bool
    law: bytes | None = None
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
    read = teach_together(database, [line_item], fold, checkpoint_entries, lawful)
    return read.get(line_item, 0)


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
    rules = _Rules(fold, checkpoint_entries, lawful, limit, database.wall_ms())
    taught = database.write(lambda connection: _turns(connection, line_items, rules))
    for name, one in taught.items():
        if one.tries >= TRIES_MAX:
            # Apart: the stream is locked before the learner, and here the learner was first.
            aside = partial(_set_aside, line_item=name, taught=one, now=database.wall_ms())
            database.write(aside)
    return {name: one.read for name, one in taught.items()}


def share_of(line_items: int) -> int:
    """How many entries are read of each of so many line items taught together."""
    return max(1, ENTRIES_MAX // line_items)


def _turns(connection: Writing, line_items: Sequence[str], rules: _Rules) -> dict[str, _Taught]:
    """One turn of each line item that no other teacher is at; a statement a kind for all."""
    found = connection.execute(locking(connection, _MINE, skip=True), {"ids": list(line_items)})
    rows = {row.line_item: row for row in found}
    # Read under the lock, for a change of terms refolds under it too.
    configs = read_configs(connection, rows)
    paid_by = {name: config["spend_on"] for name, config in configs.items()}
    cancelled = lessons.cancellations_of(connection, paid_by)
    pages = lessons.next_pages(connection, rules.limit, cancelled)
    taught = {
        # With nothing left to read, what could not be published yet may be published now.
        name: _turn(row, pages.get(name, Page([], [], 0, row.seq)), configs[name], rules)
        for name, row in rows.items()
    }
    _keep(connection, taught, rules.now_ms)
    return taught


def _turn(row: Any, page: Page, config: dict[str, Any], rules: _Rules) -> _Taught:
    """Fold a page; pure."""
    read, seq, poison, tries, error = page.read, page.end, 0, 0, ""
    try:
        state = rules.fold(bytes(row.working), page.lessons, config)
    except PoisonLesson as bad:
        # The fold is pure, so the part before the bad entry is simply folded again.
        state = rules.fold(bytes(row.working), page.lessons[: bad.place], config)
        poison, error = page.seqs[bad.place], str(bad)
        seq, read = poison - 1, poison - 1 - row.seq
        # Counted for this one entry: the next bad one gets turns of its own.
        tries = row.tries + 1 if row.stuck_seq == poison else 1
    digest = digest_of(state)
    # A state that has not caught up is not published, or a refold would forget in public.
    caught_up = read < rules.limit and not (poison and row.halted)
    # What has not changed is not published, since every worker would load it for nothing.
    published = caught_up and (bool(row.halted) or digest != row.digest)
    law = rules.lawful(state, config) if published else None
    checkpoint = seq // rules.every > row.seq // rules.every
    return _Taught(read, seq, state, digest, published, checkpoint, law, poison, tries, error)


def _keep(connection: Writing, taught: Mapping[str, _Taught], now_ms: int) -> None:
    """Write what was learnt, and tell the workers of what is published."""
    learnt, published = list[dict[str, Any]](), list[dict[str, Any]]()
    for name, (_, seq, state, digest, public, checkpoint, law, poison, tries, _) in taught.items():
        row = {"id": name, "seq": seq, "state": state, "digest": digest, "now": now_ms}
        learnt.append({**row, "stuck": poison, "tries": tries})
        if checkpoint:
            connection.execute(_CHECKPOINT, row)
        if public:
            published.append(row)
        if law is not None:
            epochs.keep(connection, name, seq, law)
    if learnt:
        update_many(connection, LEARN, learnt)
    # The change number last: its one row is what every writer waits for.
    if published:
        update_many(connection, _PUBLISH, published)
        announce(connection, SNAPSHOT, [row["id"] for row in published])


def _set_aside(connection: Writing, line_item: str, taught: _Taught, now: int) -> None:
    """Let an entry teach nothing that the fold cannot take; people may try it again."""
    books = Books(connection, [line_item], now)
    row = connection.execute(locking(connection, _MINE), {"ids": [line_item]}).one()
    # Another teacher may have got past it since, or set it aside already.
    if (row.stuck_seq, row.tries >= TRIES_MAX) != (taught.poison, True):
        return
    body = {"entry": taught.poison, "error": taught.error}
    books.post(line_item, Entry("quarantine", body))
    books.save()
    by_seq = books.accounts[line_item].seq
    lessons.cancel(connection, line_item, by_seq, ALL, [(taught.poison, taught.poison, ALL)])
    quarantine(connection, line_item, taught.error, {"event": "Lesson"}, now, taught.poison)
    unstuck = {"id": line_item, "seq": row.seq, "state": bytes(row.working)}
    update_many(connection, LEARN, [{**unstuck, "stuck": 0, "tries": 0}])
    note(
        connection, wall_ms=now, actor="bidkeel", action="quarantine", line_item=line_item,
        reason="a lesson could not be learnt", detail=body,
    )  # fmt: skip


# In one order for everybody, so that two teachers of several never wait for each other.
_MINE = (
    "SELECT line_item, seq, working, digest, halted, stuck_seq, tries FROM learner"
    " WHERE line_item IN :ids ORDER BY line_item"
)
_PUBLISH = (
    "UPDATE learner SET snapshot = :seq, state = :state, digest = :digest, published_ms = :now,"
    " halted = 0 WHERE line_item = :id"
)
# A damaged one of the same seq is mended by the way.
_CHECKPOINT = text(
    "INSERT INTO checkpoint (line_item, seq, state, digest, at_ms)"
    " VALUES (:id, :seq, :state, :digest, :now) ON CONFLICT (line_item, seq)"
    " DO UPDATE SET state = excluded.state, digest = excluded.digest"
)
