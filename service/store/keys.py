"""Access keys: random, stored only as a hash, shown once."""

from __future__ import annotations

import hashlib
import secrets
from dataclasses import dataclass

from sqlalchemy import text

from service.errors import Malformed, NotFound
from service.store.changes import ALL, announce
from service.store.database import Database, Reading, Writing

SCOPES = ("bid", "report", "read", "operate", "admin")


@dataclass(frozen=True, slots=True)
class Key:
    """A key as we know it; `admin` implies every scope."""

    id: str
    name: str
    scopes: frozenset[str]

    def allows(self, scope: str) -> bool:
        """Whether this key may do what needs `scope`."""
        return scope in self.scopes or "admin" in self.scopes


def add(database: Database, name: str, scopes: list[str]) -> tuple[Key, str]:
    """
    Make a key; the text returned beside it is never seen again.

    Raises:
        Malformed: An unknown scope, or none.
    """
    if not scopes or not set(scopes) <= set(SCOPES):
        raise Malformed("bad_scope", f"Scopes are {', '.join(SCOPES)}.")
    # Random keys of 256 bits need no slow hash: there is nothing to guess them from.
    key, bearer = Key(secrets.token_hex(6), name, frozenset(scopes)), secrets.token_urlsafe(32)

    def work(connection: Writing) -> None:
        connection.execute(
            text(
                "INSERT INTO access_key (id, name, hash, scopes, created_ms)"
                " VALUES (:id, :name, :hash, :scopes, :created_ms)"
            ),
            {
                "id": key.id,
                "name": name,
                "hash": hashed(bearer),
                "scopes": " ".join(sorted(scopes)),
                "created_ms": database.wall_ms(),
            },
        )
        announce(connection, "keys", [ALL])

    database.write(work)
    return key, bearer


def end(database: Database, key_id: str) -> None:
    """
    End a key; every worker forgets it at its next look at the changes.

    Raises:
        NotFound: No live key of this id.
    """

    def work(connection: Writing) -> None:
        ended = connection.execute(
            text("UPDATE access_key SET ended_ms = :now WHERE id = :id AND ended_ms IS NULL"),
            {"id": key_id, "now": database.wall_ms()},
        )
        if ended.rowcount == 0:
            raise NotFound("no_such_key", "There is no live key with this id.")
        announce(connection, "keys", [ALL])

    database.write(work)


def by_bearer(connection: Reading, bearer: str) -> Key | None:
    """The live key behind a bearer text, or None."""
    # Looked up by hash through an index, so no comparison of secrets can be timed.
    row = connection.execute(
        text("SELECT id, name, scopes FROM access_key WHERE hash = :hash AND ended_ms IS NULL"),
        {"hash": hashed(bearer)},
    ).one_or_none()
    return None if row is None else Key(row.id, row.name, frozenset(row.scopes.split()))


def listed(connection: Reading) -> list[dict[str, object]]:
    """Every key ever made, without its text or hash, oldest first."""
    rows = connection.execute(
        text("SELECT id, name, scopes, created_ms, ended_ms FROM access_key ORDER BY created_ms")
    )
    return [dict(row._mapping) for row in rows]


def hashed(bearer: str) -> str:
    """A key is 32 random bytes, so a plain hash cannot be reversed by guessing."""
    return hashlib.sha256(bearer.encode("utf-8", "surrogatepass")).hexdigest()
