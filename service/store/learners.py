"""Learner states as bytes: the current snapshot, checkpoints, and the lessons not yet folded."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from sqlalchemy import LargeBinary, text

from service.ledger.entries import Body, Entry
from service.store.books import Books
from service.store.changes import announce
from service.store.database import Database, Reading, Writing, among, locking
from service.store.leases import read_configs

Lesson = tuple[str, Body]
Fold = Callable[[bytes, list[Lesson], dict[str, Any]], bytes]
ENTRIES_MAX = 2000


@dataclass(frozen=True, slots=True)
class Snapshot:
    """A published state: what it is, up to which seq it has read, when it was published."""

    seq: int
    state: bytes
    digest: str
    published_ms: int

    @property
    def sound(self) -> bool:
        """Whether the bytes are those that were published."""
        return digest_of(self.state) == self.digest


def digest_of(state: bytes) -> str:
    """The fingerprint kept beside a state."""
    return hashlib.sha256(state).hexdigest()


def behind(connection: Reading) -> list[str]:
    """Line items whose stream has entries that their learner has not read."""
    rows = connection.execute(
        text(
            "SELECT b.line_item FROM balance b JOIN learner l ON l.line_item = b.line_item"
            " WHERE b.seq > l.seq ORDER BY b.line_item"
        )
    )
    return [row.line_item for row in rows]


def teach(database: Database, line_item: str, fold: Fold, checkpoint_entries: int) -> int:
    """
    Fold the next entries into the one state of a line item; returns how many were read.

    One teacher at a time: the learner's row is locked, and another teacher passes by.

    Args:
        fold: Pure; state, lessons and the line item's configuration in, state out.
        checkpoint_entries: A checkpoint is kept whenever seq passes a multiple of it.
    """

    def work(connection: Writing) -> int:
        mine = "SELECT seq, working, digest FROM learner WHERE line_item = :id"
        statement = locking(connection, mine, skip=True)
        row = connection.execute(statement, {"id": line_item}).one_or_none()
        if row is None:
            return 0
        lessons = _lessons(connection, line_item, row.seq, ENTRIES_MAX)
        # Read under the lock, for a change of terms refolds under it too.
        config = read_configs(connection, [line_item])[line_item]
        state, seq = fold(bytes(row.working), lessons, config), row.seq + len(lessons)
        now = database.wall_ms()
        connection.execute(_LEARN, {"id": line_item, "seq": seq, "state": state})
        if seq // checkpoint_entries > row.seq // checkpoint_entries:
            _checkpoint(connection, line_item, seq, state, now)
        # A state that has not caught up is not published, or a refold would forget in public.
        if len(lessons) < ENTRIES_MAX and digest_of(state) != row.digest:
            _publish(connection, line_item, seq, state, now)
        return len(lessons)

    return database.write(work)


def fold_all(connection: Reading, line_item: str, start: bytes, fold: Fold) -> bytes:
    """The state that the whole stream up to the learner's seq gives, folded from `start`."""
    end = connection.execute(
        text("SELECT seq FROM learner WHERE line_item = :id"), {"id": line_item}
    ).scalar_one()
    config = read_configs(connection, [line_item])[line_item]
    state, seq = start, 0
    while lessons := _lessons(connection, line_item, seq, min(ENTRIES_MAX, end - seq)):
        state = fold(state, lessons, config)
        seq += len(lessons)
    return state


def snapshots(connection: Reading, line_items: list[str]) -> dict[str, Snapshot]:
    """The current snapshot of each line item."""
    statement = among(
        "SELECT line_item, snapshot, state, digest, published_ms FROM learner"
        " WHERE line_item IN :ids",
    )
    return {
        row.line_item: Snapshot(row.snapshot, bytes(row.state), row.digest, row.published_ms)
        for row in connection.execute(statement, {"ids": line_items})
    }


def begin(connection: Writing, line_item: str, state: bytes, wall_ms: int) -> None:
    """Publish the first state of a new line item, so that it can bid at once."""
    connection.execute(
        text(
            "INSERT INTO learner"
            " (line_item, seq, working, matured_seq, reset_seq, snapshot, state, digest,"
            " published_ms) VALUES (:id, 0, :state, 0, 0, 0, :state, :digest, :now)"
        ),
        {"id": line_item, "state": state, "digest": digest_of(state), "now": wall_ms},
    )


def refold(connection: Writing, line_item: str, state: bytes) -> None:
    """Let the teacher read the whole stream again from `state`, after a change of terms."""
    connection.execute(_LEARN, {"id": line_item, "seq": 0, "state": state})
    # Checkpoints under the old terms would make a later rebuild differ from a fold from zero.
    connection.execute(text("DELETE FROM checkpoint WHERE line_item = :id"), {"id": line_item})


def begin_afresh(connection: Writing, line_item: str, seq: int) -> None:
    """Note the seq of a reset: what was won before it teaches nothing more."""
    connection.execute(
        text("UPDATE learner SET reset_seq = :seq, matured_seq = :seq WHERE line_item = :id"),
        {"seq": seq, "id": line_item},
    )


def mature(database: Database, line_item: str) -> int:
    """
    Close the value windows that service time has passed; returns how many wins matured.

    The entry carries what each of these impressions brought, so the fold needs no clock.
    """

    def work(connection: Writing) -> int:
        books = Books(connection, [line_item], database.wall_ms())
        config = read_configs(connection, [line_item])[line_item]
        wins = _ripe(connection, line_item, config, books.service_ms)
        if not wins:
            return 0
        totals = _totals(connection, {bytes(w.bid): w for w in wins}, config["value"]["window_ms"])
        body = {"wins": len(wins), "amounts": totals, "up_to": wins[-1].seq}
        books.post(line_item, Entry("matured", body))
        books.save()
        connection.execute(
            text("UPDATE learner SET matured_seq = :seq WHERE line_item = :id"),
            {"seq": wins[-1].seq, "id": line_item},
        )
        return len(wins)

    return database.write(work)


def ripening(connection: Reading) -> list[str]:
    """Line items with wins whose value window may still have to close."""
    rows = connection.execute(
        text(
            "SELECT b.line_item, i.config FROM balance b"
            " JOIN learner l ON l.line_item = b.line_item JOIN line_item i ON i.id = b.line_item"
            " WHERE b.seq > l.matured_seq"
        )
    ).all()
    accruing = [(r, json.loads(r.config)) for r in rows]
    service_ms = connection.execute(text("SELECT now_ms FROM service_clock")).scalar_one()
    return [
        row.line_item
        for row, config in accruing
        if config["value"]["arrival"] == "accrues"
        and _ripe(connection, row.line_item, config, service_ms, limit=1)
    ]


def _lessons(connection: Reading | Writing, line_item: str, seq: int, limit: int) -> list[Lesson]:
    rows = connection.execute(
        text(
            "SELECT kind, body FROM stream WHERE line_item = :id AND seq > :seq"
            " ORDER BY seq LIMIT :limit"
        ),
        {"id": line_item, "seq": seq, "limit": limit},
    )
    return [(row.kind, json.loads(row.body)) for row in rows]


def _publish(connection: Writing, line_item: str, seq: int, state: bytes, now: int) -> None:
    row = {"seq": seq, "state": state, "digest": digest_of(state), "now": now, "id": line_item}
    connection.execute(_PUBLISH, row)
    announce(connection, "snapshot", [line_item])


def _checkpoint(connection: Writing, line_item: str, seq: int, state: bytes, now: int) -> None:
    connection.execute(
        text(
            "INSERT INTO checkpoint (line_item, seq, state, digest, at_ms)"
            " VALUES (:id, :seq, :state, :digest, :now) ON CONFLICT DO NOTHING"
        ),
        {"id": line_item, "seq": seq, "state": state, "digest": digest_of(state), "now": now},
    )


def _ripe(
    connection: Reading | Writing,
    line_item: str,
    config: dict[str, Any],
    service_ms: int,
    limit: int = 1000,
) -> list[Any]:
    """Paid impressions after the last matured one whose window is over, oldest first."""
    rows = connection.execute(
        text(
            "SELECT s.seq, s.bid, s.service_ms FROM stream s"
            " WHERE s.line_item = :id AND s.kind = :kind AND s.service_ms <= :until"
            " AND s.seq > (SELECT matured_seq FROM learner WHERE line_item = :id)"
            " ORDER BY s.seq LIMIT :limit"
        ),
        {
            "id": line_item,
            "kind": config["spend_on"],
            "until": service_ms - config["value"]["window_ms"],
            "limit": limit,
        },
    )
    return list(rows)


def _totals(connection: Writing, wins: dict[bytes, Any], window_ms: int) -> list[int]:
    """What each impression brought inside its window, in nanos; zeros are left out."""
    statement = among(
        "SELECT bid, body, service_ms FROM stream WHERE kind = 'value' AND bid IN :bids"
        " ORDER BY seq",
        "bids",
        LargeBinary,
    )
    totals: dict[bytes, int] = {}
    for row in connection.execute(statement, {"bids": sorted(wins)}):
        bid, body = bytes(row.bid), json.loads(row.body)
        # What comes after the window is kept in the stream, but the window was the question.
        if row.service_ms <= wins[bid].service_ms + window_ms:
            totals[bid] = totals.get(bid, 0) + body["amount"] - (body["was"] or 0)
    return sorted(total for total in totals.values() if total > 0)


_LEARN = text("UPDATE learner SET seq = :seq, working = :state WHERE line_item = :id")
_PUBLISH = text(
    "UPDATE learner SET snapshot = :seq, state = :state, digest = :digest, published_ms = :now"
    " WHERE line_item = :id"
)
