"""Folding again: from zero, from a sound checkpoint, and putting a learner back.

Apart from teaching, which only ever goes forward.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.ledger.cancelling import Cancelled, Span
from service.store import lessons
from service.store.changes import announce
from service.store.database import Reading, Writing, locking
from service.store.learners import Snapshot, digest_of
from service.store.leases import read_configs
from service.store.teachers import ENTRIES_MAX, Fold

Seen = Callable[[int], None]  # Told the seq that a fold has reached.


@dataclass(frozen=True, slots=True)
class Start:
    """A state to fold on from, and the seqs of checkpoints that were refused as damaged."""

    seq: int
    state: bytes
    refused: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True)
class Standing:
    """Where a learner stands: its head, what it has folded and what is published."""

    head: int
    seq: int
    working: bytes
    snapshot: Snapshot
    config: dict[str, Any]


def fold_until(
    connection: Reading | Writing,
    line_item: str,
    start: Start,
    end: int,
    fold: Fold,
    cancelled: Cancelled | None = None,
    seen: Seen = lambda seq: None,
) -> bytes:
    """The state at seq `end`, folded on from a start; with other cancellations when given."""
    if cancelled is None:
        cancelled = lessons.cancellations(connection, line_item)
    config = read_configs(connection, [line_item])[line_item]
    state, seq = start.state, start.seq
    while seq < end:
        page = lessons.read(connection, line_item, seq, min(ENTRIES_MAX, end - seq), cancelled)
        if not page.read:
            break
        state, seq = fold(state, page.lessons, config), page.end
        seen(seq)
    return state


def fold_all(connection: Reading, line_item: str, start: bytes, fold: Fold) -> bytes:
    """The state that the whole stream up to the learner's seq gives, folded from `start`."""
    end = standing(connection, line_item).seq
    return fold_until(connection, line_item, Start(0, start), end, fold)


def nearest(connection: Reading | Writing, line_item: str, seq: int, fresh: bytes) -> Start:
    """The newest checkpoint at or before `seq` whose digest matches, else the beginning."""
    refused = list[int]()
    for row in connection.execute(_CHECKPOINTS, {"id": line_item, "seq": seq}):
        if digest_of(bytes(row.state)) == row.digest:
            return Start(row.seq, bytes(row.state), tuple(refused))
        refused.append(row.seq)
    return Start(0, fresh, tuple(refused))


def standing(connection: Reading | Writing, line_item: str) -> Standing:
    """Where the learner of a line item stands."""
    row = connection.execute(text(_STANDING), {"id": line_item}).one()
    snapshot = Snapshot(
        row.snapshot, bytes(row.state), row.digest, row.published_ms, bool(row.halted)
    )
    config = read_configs(connection, [line_item])[line_item]
    return Standing(row.head, row.seq, bytes(row.working), snapshot, config)


@dataclass(frozen=True, slots=True)
class Rebuilt:
    """
    What folding again came to; digests of the states, and every difference in words.

    Args:
        seq: Up to where was folded.
        checkpoint: The seq of the checkpoint that the second fold went on from, or 0.
        refused: Checkpoints whose digest does not match.
    """

    line_item: str
    seq: int
    checkpoint: int
    refused: tuple[int, ...]
    digest: str
    differences: tuple[str, ...]


def rebuild(
    connection: Reading,
    line_item: str,
    to: int | None,
    fresh: bytes,
    fold: Fold,
    seen: Seen = lambda seq: None,
) -> Rebuilt:
    """
    Fold from zero and from the nearest checkpoint, and compare both with what is published.

    Args:
        to: An earlier seq instead of the learner's; then nothing published is compared.
    """
    now = standing(connection, line_item)
    end = now.seq if to is None else min(to, now.head)
    cancelled = lessons.cancellations(connection, line_item)
    # Halted where the snapshot was made, so that one pass yields both states to compare.
    first = min(now.snapshot.seq, end) if to is None else 0

    def on(start: Start, until: int) -> bytes:
        return fold_until(connection, line_item, start, until, fold, cancelled, seen)

    early = on(Start(0, fresh), first)
    whole = on(Start(first, early), end)
    start = nearest(connection, line_item, end, fresh)
    tail = on(start, end)
    differences = [f"checkpoint {seq} is damaged and was refused" for seq in start.refused]
    if tail != whole:
        differences.append(f"checkpoint {start.seq} and what follows differ from the fold")
    if to is None:
        differences += _standing_differences(now, early, whole)
    return Rebuilt(line_item, end, start.seq, start.refused, digest_of(whole), tuple(differences))


def _standing_differences(now: Standing, early: bytes, whole: bytes) -> list[str]:
    found = []
    if now.working != whole:
        found.append(f"the learner's state at {now.seq} differs from the fold")
    if not now.snapshot.sound:
        found.append(f"the published snapshot {now.snapshot.seq} is damaged")
    # While it is being refolded what is published is known to be of the past.
    refolding = now.snapshot.halted or now.seq < now.snapshot.seq
    if not refolding and now.snapshot.sound and now.snapshot.state != early:
        found.append(f"the published snapshot {now.snapshot.seq} differs from the fold")
    return found


def put_back(connection: Writing, line_item: str, spans: Iterable[Span], fresh: bytes) -> Start:
    """
    Put a learner back before the first cancelled entry and halt its bids until it is refolded.

    The cancellations stand in their table already; the caller holds the lock of the stream.
    """
    first = min(span[0] for span in spans)
    # The teacher may be at work: it is waited for, so that it cannot publish behind us.
    row = connection.execute(locking(connection, _WORKING), {"id": line_item}).one()
    start = Start(row.seq, bytes(row.working))
    # A learner that has not come so far has learnt none of it, and just reads on.
    if row.seq >= first:
        start = nearest(connection, line_item, first - 1, fresh)
    # Those behind hold what was cancelled.
    connection.execute(
        text("DELETE FROM checkpoint WHERE line_item = :id AND seq >= :first"),
        {"id": line_item, "first": first},
    )
    cancelled = lessons.cancellations(connection, line_item)
    connection.execute(
        text(
            "UPDATE learner SET seq = :seq, working = :state, reset_seq = :reset, halted = 1,"
            " stuck_seq = 0, tries = 0 WHERE line_item = :id"
        ),
        {
            "id": line_item,
            "seq": start.seq,
            "state": start.state,
            # A reset may itself be among what is cancelled.
            "reset": lessons.last_reset(connection, line_item, cancelled),
        },
    )
    announce(connection, "learner", [line_item])
    return start


_CHECKPOINTS = text(
    "SELECT seq, state, digest FROM checkpoint WHERE line_item = :id AND seq <= :seq"
    " ORDER BY seq DESC"
)
_STANDING = (
    "SELECT b.seq AS head, l.seq, l.working, l.snapshot, l.state, l.digest, l.published_ms,"
    " l.halted FROM learner l JOIN balance b ON b.line_item = l.line_item WHERE l.line_item = :id"
)
_WORKING = "SELECT seq, working FROM learner WHERE line_item = :id"
