"""News for whoever is to be told, kept in the transaction of what it tells, sent by the clerk.

What is put here carries no reason and no name of a person, for those are free text.
"""

from __future__ import annotations

import json
import secrets
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing

# So many calls may be open at once to the one receiver.
DUE_MAX = 50
PRUNED_MAX = 5000


@dataclass(frozen=True, slots=True)
class News:
    """
    One piece of news.

    Args:
        id: The same however often it is sent, so that a receiver can tell a repeat.
        tries: How often it was tried before.
    """

    number: int
    id: str
    kind: str
    line_item: str
    body: dict[str, Any]
    at_ms: int
    tries: int
    next_ms: int


def put(
    connection: Writing, kind: str, line_item: str, body: Mapping[str, Any], wall_ms: int
) -> None:
    """Keep one piece of news."""
    # Not our number, which a restored backup counts again: new news would look like a repeat.
    row = {"id": secrets.token_hex(16), "kind": kind, "line_item": line_item, "now": wall_ms}
    connection.execute(_PUT, row | {"body": json.dumps(dict(body), sort_keys=True)})


def due(connection: Reading, wall_ms: int) -> list[News]:
    """What should be sent by now, oldest first."""
    rows = connection.execute(_DUE, {"now": wall_ms, "limit": DUE_MAX})
    return [News(**{**row._mapping, "body": json.loads(row.body)}) for row in rows]


def claim(connection: Writing, news: News, until_ms: int) -> bool:
    """Take one for a while; False when another clerk has. Untold by then it is due again."""
    row = {"number": news.number, "seen": news.next_ms, "until": until_ms}
    return connection.execute(_CLAIM, row).rowcount == 1


def sent(connection: Writing, number: int) -> None:
    """Note that its receiver has taken it."""
    connection.execute(_STATE, {"number": number, "state": "sent", "error": ""})


def failed(connection: Writing, number: int, error: str, next_ms: int | None) -> None:
    """Note why it was not taken, and when to try again; None gives it up."""
    if next_ms is None:
        connection.execute(_STATE, {"number": number, "state": "given_up", "error": error})
    else:
        connection.execute(_AGAIN, {"number": number, "error": error, "next": next_ms})


def standing(connection: Reading, line_item: str) -> dict[str, Any]:
    """How much news of a line item waits and was given up, and why the last was."""
    counts = connection.execute(_COUNTS, {"id": line_item})
    shown: dict[str, Any] = {"waiting": 0, "sent": 0, "given_up": 0}
    shown |= {row.state: int(row.n) for row in counts}
    last = connection.execute(_LAST_ERROR, {"id": line_item}).scalar_one_or_none()
    return {**shown, "last_error": last}


def prune(connection: Writing, before_ms: int) -> int:
    """Forget the oldest news told or given up before this wall clock moment; returns how many."""
    return connection.execute(_PRUNE, {"before": before_ms, "limit": PRUNED_MAX}).rowcount


def drop(connection: Writing) -> int:
    """Forget what waits, where nobody is to be told; returns how much."""
    return connection.execute(_DROP, {"limit": PRUNED_MAX}).rowcount


_PUT = text(
    "INSERT INTO outbox (id, kind, line_item, body, at_ms, next_ms)"
    " VALUES (:id, :kind, :line_item, :body, :now, :now)"
)
_DUE = text(
    "SELECT number, id, kind, line_item, body, at_ms, tries, next_ms FROM outbox"
    " WHERE state = 'waiting' AND next_ms <= :now ORDER BY next_ms, number LIMIT :limit"
)
# By the moment that was seen and that every claim moves: the second clerk finds it moved.
_CLAIM = text(
    "UPDATE outbox SET next_ms = :until, tries = tries + 1"
    " WHERE number = :number AND state = 'waiting' AND next_ms = :seen"
)
_STATE = text("UPDATE outbox SET state = :state, error = :error WHERE number = :number")
_AGAIN = text("UPDATE outbox SET next_ms = :next, error = :error WHERE number = :number")
_COUNTS = text("SELECT state, count(*) AS n FROM outbox WHERE line_item = :id GROUP BY state")
_LAST_ERROR = text(
    "SELECT error FROM outbox WHERE line_item = :id AND error <> '' ORDER BY number DESC LIMIT 1"
)
# Never what waits, however old: it is told or given up first.
_PRUNE = text(
    "DELETE FROM outbox WHERE number IN (SELECT number FROM outbox"
    " WHERE state <> 'waiting' AND at_ms < :before ORDER BY number LIMIT :limit)"
)
_DROP = text(
    "DELETE FROM outbox WHERE number IN (SELECT number FROM outbox"
    " WHERE state = 'waiting' ORDER BY number LIMIT :limit)"
)
