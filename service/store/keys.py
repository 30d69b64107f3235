"""Access keys: random, stored only as a hash, shown once; limited, expiring and rotated."""

from __future__ import annotations

import hashlib
import json
import re
import secrets
from dataclasses import asdict, dataclass
from typing import Any

from sqlalchemy import text

from service.errors import Malformed, NotFound
from service.store.changes import ALL, announce
from service.store.database import Database, Reading, Writing, locking
from service.store.journal import note

SCOPES = ("bid", "report", "read", "operate", "admin")
LINE_ITEMS_MAX = 1000
OVERLAP_MS_MAX = 90 * 86_400_000
_ID = re.compile(r"[A-Za-z0-9._-]{1,64}")


@dataclass(frozen=True, slots=True)
class Key:
    """
    A key as we know it; `admin` implies every scope.

    Args:
        line_items: The only line items that exist for it; None for all.
        until_ms: When it, or the text by which it was found, ends by itself; None for never.
    """

    id: str
    name: str
    scopes: frozenset[str]
    line_items: frozenset[str] | None = None
    until_ms: int | None = None

    def allows(self, scope: str) -> bool:
        """Whether this key may do what needs `scope`."""
        return scope in self.scopes or "admin" in self.scopes

    def reaches(self, line_item: str) -> bool:
        """Whether this line item exists for this key."""
        return self.line_items is None or line_item in self.line_items


@dataclass(frozen=True, slots=True)
class Wish:
    """
    A key that somebody wants made.

    Args:
        line_items: The only ones it may touch; None for all.
        expires_ms: Wall clock moment from which it is unknown; None for never.
    """

    name: str
    scopes: tuple[str, ...]
    line_items: tuple[str, ...] | None = None
    expires_ms: int | None = None

    def object_to(self, now_ms: int) -> None:
        """
        Refuse what would be no key, or one that is mightier than it looks.

        Raises:
            Malformed: With a code that says what.
        """
        # It is shown in terminals and journals, where control characters would do harm.
        if not 1 <= len(self.name) <= 100 or not self.name.isprintable():
            raise Malformed("bad_name", "A key's name has 1 to 100 printable characters.")
        if not self.scopes or not set(self.scopes) <= set(SCOPES):
            raise Malformed("bad_scope", f"Scopes are {', '.join(SCOPES)}.")
        if self.expires_ms is not None and self.expires_ms <= now_ms:
            raise Malformed("expired_already", "A key must end in the future.")
        if self.line_items is None:
            return
        # It could give itself another key without the limit.
        if "admin" in self.scopes:
            raise Malformed("admin_is_not_limited", "A key with admin cannot be limited.")
        fit = 1 <= len(self.line_items) <= LINE_ITEMS_MAX
        if not fit or not all(_ID.fullmatch(name) for name in self.line_items):
            detail = f"Name 1 to {LINE_ITEMS_MAX} line items, each by its id."
            raise Malformed("bad_line_items", detail)


def new_text() -> str:
    """The text of a key: 256 random bits, so that there is nothing to guess it from."""
    return secrets.token_urlsafe(32)


def hashed(bearer: str) -> str:
    """A key is 32 random bytes, so a plain hash cannot be reversed by guessing."""
    return hashlib.sha256(bearer.encode("utf-8", "surrogatepass")).hexdigest()


def make(
    connection: Writing, key_id: str, wish: Wish, bearer: str, now_ms: int, *, by: tuple[str, str]
) -> Key:
    """
    Add a key under its text; `by` is who did it and why.

    Raises:
        Malformed: The wish is for no key.
    """
    wish.object_to(now_ms)
    plain = wish.line_items is None and wish.expires_ms is None
    row = {
        "id": key_id,
        "name": wish.name,
        # A release that knows no limits must not take a limited key for an unlimited one.
        "hash": hashed(bearer) if plain else f"limited {key_id}",
        "scopes": " ".join(sorted(set(wish.scopes))),
        "line_items": None if wish.line_items is None else json.dumps(sorted(set(wish.line_items))),
        "expires": wish.expires_ms,
        "now": now_ms,
    }
    connection.execute(_MAKE, row)
    connection.execute(_TEXT, {"hash": hashed(bearer), "id": key_id, "now": now_ms})
    _note(connection, now_ms, by, "key_add", {"key": key_id, "after": asdict(wish)})
    named = None if wish.line_items is None else frozenset(wish.line_items)
    return Key(key_id, wish.name, frozenset(wish.scopes), named, wish.expires_ms)


def finish(connection: Writing, key_id: str, now_ms: int, *, by: tuple[str, str]) -> None:
    """
    End a key; every worker forgets it at its next look at the changes.

    Raises:
        NotFound: No live key of this id.
    """
    _live(connection, key_id)
    connection.execute(_END, {"id": key_id, "now": now_ms})
    _note(connection, now_ms, by, "key_end", {"key": key_id, "after": {"ended_ms": now_ms}})


def renew(
    connection: Writing,
    key_id: str,
    bearer: str,
    now_ms: int,
    *,
    overlap_ms: int,
    by: tuple[str, str],
) -> int:
    """
    Give a key another text; the texts before it work until the moment returned.

    Raises:
        NotFound: No live key of this id.
        Malformed: The overlap is none.
    """
    if not 0 <= overlap_ms <= OVERLAP_MS_MAX:
        detail = f"An overlap lasts 0 to {OVERLAP_MS_MAX // 1000} seconds."
        raise Malformed("bad_overlap", detail)
    row = _live(connection, key_id)
    until_ms: int = now_ms + overlap_ms
    connection.execute(_OUTDATE, {"id": key_id, "until": until_ms})
    connection.execute(_TEXT, {"hash": hashed(bearer), "id": key_id, "now": now_ms})
    if not row.hash.startswith("limited "):
        connection.execute(_REPLACE, {"id": key_id, "hash": hashed(bearer)})
    told = {"key": key_id, "after": {"old_text_until_ms": until_ms}}
    _note(connection, now_ms, by, "key_rotate", told)
    return until_ms


def add(
    database: Database,
    name: str,
    scopes: list[str],
    *,
    line_items: list[str] | None = None,
    expires_ms: int | None = None,
    by: tuple[str, str] = ("bidkeel", "a key made beside the service"),
) -> tuple[Key, str]:
    """
    Make a key; the text returned beside it is never seen again.

    Raises:
        Malformed: The wish is for no key.
    """
    named = None if line_items is None else tuple(line_items)
    wish, bearer = Wish(name, tuple(scopes), named, expires_ms), new_text()
    key_id = secrets.token_hex(6)
    made = database.write(
        lambda c: make(c, key_id, wish, bearer, database.wall_ms(), by=by),
    )
    return made, bearer


def end(
    database: Database, key_id: str, *, by: tuple[str, str] = ("bidkeel", "ended by hand")
) -> None:
    """
    End a key in a transaction of its own.

    Raises:
        NotFound: No live key of this id.
    """
    database.write(lambda c: finish(c, key_id, database.wall_ms(), by=by))


def by_bearer(connection: Reading, bearer: str) -> Key | None:
    """The key behind a bearer text unless somebody ended it; its caller minds `until_ms`."""
    # Looked up by hash through an index, so no comparison of secrets can be timed.
    row = connection.execute(_FIND, {"hash": hashed(bearer)}).one_or_none()
    return None if row is None else _key(row)


def by_id(connection: Reading, key_id: str) -> Key | None:
    """The key of this id unless somebody ended it; its caller minds `until_ms`."""
    row = connection.execute(_BY_ID, {"id": key_id}).one_or_none()
    return None if row is None else _key(row)


def listed(connection: Reading) -> list[dict[str, Any]]:
    """Every key ever made, without its text or hash, oldest first."""
    rows = [dict(row._mapping) for row in connection.execute(_LISTED)]
    for row in rows:
        row["line_items"] = None if row["line_items"] is None else json.loads(row["line_items"])
    return rows


def used(connection: Writing, key_ids: list[str], now_ms: int) -> None:
    """Write that these keys were used."""
    # Sorted, so that two workers which write the same keys wait for one another in one order.
    rows = [{"id": key_id, "now": now_ms} for key_id in sorted(key_ids)]
    if rows:
        connection.execute(_USED, rows)


def _key(row: Any) -> Key:
    named = None if row.line_items is None else frozenset(json.loads(row.line_items))
    ends = [moment for moment in (row.expires_ms, row.until_ms) if moment is not None]
    return Key(row.id, row.name, frozenset(row.scopes.split()), named, min(ends, default=None))


def _live(connection: Writing, key_id: str) -> Any:
    row = connection.execute(locking(connection, _LIVE), {"id": key_id}).one_or_none()
    if row is None:
        raise NotFound("no_such_key", "There is no live key with this id.")
    return row


def _note(
    connection: Writing, now_ms: int, by: tuple[str, str], action: str, detail: dict[str, Any]
) -> None:
    """The common end of what is done to keys: the journal, and every worker's news."""
    actor, reason = by
    note(
        connection, wall_ms=now_ms, actor=actor, action=action, line_item=ALL,
        reason=reason, detail=detail,
    )  # fmt: skip
    announce(connection, "keys", [ALL])


_MAKE = text(
    "INSERT INTO access_key (id, name, hash, scopes, created_ms, line_items, expires_ms)"
    " VALUES (:id, :name, :hash, :scopes, :now, :line_items, :expires)"
)
_TEXT = text("INSERT INTO key_text (hash, key_id, made_ms) VALUES (:hash, :id, :now)")
_LIVE = "SELECT id, hash FROM access_key WHERE id = :id AND ended_ms IS NULL"
_END = text("UPDATE access_key SET ended_ms = :now WHERE id = :id AND ended_ms IS NULL")
# Only ever shortened: a second turn must not bring an older text back to life.
_OUTDATE = text(
    "UPDATE key_text SET until_ms = :until"
    " WHERE key_id = :id AND (until_ms IS NULL OR until_ms > :until)"
)
_REPLACE = text("UPDATE access_key SET hash = :hash WHERE id = :id")
# Never back: workers write in any order, and the newest use is what people ask for.
_USED = text("UPDATE access_key SET used_ms = :now WHERE id = :id AND coalesce(used_ms, 0) < :now")
_FIND = text(
    "SELECT k.id, k.name, k.scopes, k.line_items, k.expires_ms, t.until_ms FROM key_text t"
    " JOIN access_key k ON k.id = t.key_id WHERE t.hash = :hash AND k.ended_ms IS NULL"
)
_BY_ID = text(
    "SELECT id, name, scopes, line_items, expires_ms, NULL AS until_ms FROM access_key"
    " WHERE id = :id AND ended_ms IS NULL"
)
_LISTED = text(
    "SELECT id, name, scopes, created_ms, ended_ms, line_items, expires_ms, used_ms,"
    " (SELECT max(until_ms) FROM key_text t WHERE t.key_id = k.id) AS old_text_until_ms"
    " FROM access_key k ORDER BY created_ms, id"
)
