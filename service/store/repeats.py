"""Operator calls that may be sent twice: the first answer stands for the same key."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.errors import Conflict
from service.store.database import Writing


@dataclass(frozen=True, slots=True)
class Repeat:
    """Whose call it is, the key it came with, and what it asks for."""

    actor: str
    key: str
    wish: Mapping[str, Any]

    @property
    def digest(self) -> str:
        """The fingerprint of the wish."""
        return hashlib.sha256(json.dumps(self.wish, sort_keys=True).encode()).hexdigest()


def once(
    connection: Writing, repeat: Repeat | None, work: Callable[[], dict[str, Any]], wall_ms: int
) -> dict[str, Any]:
    """
    Do `work` unless this key was used before, in the transaction of the work itself.

    Raises:
        Conflict: The key was used for another wish.
    """
    if repeat is None:
        return work()
    row = {"actor": repeat.actor, "key": repeat.key, "digest": repeat.digest, "now": wall_ms}
    # Claimed first, in this very transaction: a twin that came at once waits here for us.
    done = connection.execute(_CLAIM, row)
    if done.rowcount == 0:
        before = connection.execute(_FIND, row).one()
        if before.digest != repeat.digest:
            detail = "This Idempotency-Key was used for another call."
            raise Conflict("idempotency_key_reused", detail)
        return dict(json.loads(before.answer))
    answer = work()
    connection.execute(_KEEP, row | {"answer": json.dumps(answer)})
    return answer


def prune(connection: Writing, before_ms: int) -> int:
    """Forget keys used before this wall clock moment: a repeat after it is a new call."""
    statement = text("DELETE FROM repeat_guard WHERE at_ms < :before")
    return connection.execute(statement, {"before": before_ms}).rowcount


_CLAIM = text(
    "INSERT INTO repeat_guard (actor, repeat_key, digest, answer, at_ms)"
    " VALUES (:actor, :key, :digest, '{}', :now) ON CONFLICT DO NOTHING"
)
_FIND = text("SELECT digest, answer FROM repeat_guard WHERE actor = :actor AND repeat_key = :key")
_KEEP = text("UPDATE repeat_guard SET answer = :answer WHERE actor = :actor AND repeat_key = :key")
