"""Keys are random, known by their hash alone, and end."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest
from sqlalchemy import text

from service.errors import Malformed, NotFound
from service.store import changes, keys
from service.store.database import Database


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def test_a_bearer_text_leads_to_its_key(database: Database) -> None:
    """The text handed out once finds the key with its name and scopes."""
    key, bearer = keys.add(database, "ad server", ["report", "bid"])

    assert database.read(lambda connection: keys.by_bearer(connection, bearer)) == key
    assert key.scopes == {"bid", "report"}
    assert len(bearer) == 43


def test_another_text_leads_nowhere(database: Database) -> None:
    """A text that differs by one character, and the empty one, are unknown."""
    _, bearer = keys.add(database, "ad server", ["bid"])
    other = bearer[:-1] + ("a" if bearer[-1] != "a" else "b")

    for text_ in (other, "", bearer + "a"):
        assert database.read(lambda c, t=text_: keys.by_bearer(c, t)) is None  # type: ignore[misc]


def test_the_text_is_stored_nowhere(database: Database) -> None:
    """No column of the key's row holds the bearer text."""
    _, bearer = keys.add(database, "ad server", ["bid"])

    rows = database.read(lambda c: c.execute(text("SELECT * FROM access_key")).all())
    assert all(bearer not in str(row) for row in rows)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_the_file_does_not_hold_the_text(database: Database, tmp_path: Path) -> None:
    """Neither the database file nor its log contains the bearer text."""
    _, bearer = keys.add(database, "ad server", ["bid"])

    held = [path for path in tmp_path.iterdir() if bearer.encode() in path.read_bytes()]
    assert held == []


def test_an_ended_key_is_unknown_and_announced(database: Database) -> None:
    """Ending a key makes its text lead nowhere and tells every worker."""
    key, bearer = keys.add(database, "ad server", ["bid"])
    keys.end(database, key.id)

    assert database.read(lambda connection: keys.by_bearer(connection, bearer)) is None
    assert database.read(changes.latest) == 2
    (row,) = database.read(keys.listed)
    assert row["ended_ms"] is not None


def test_a_key_ends_once(database: Database) -> None:
    """Ending it again, or a key that never was, is refused."""
    key, _ = keys.add(database, "ad server", ["bid"])
    keys.end(database, key.id)

    for key_id in (key.id, "no-such"):
        with pytest.raises(NotFound):
            keys.end(database, key_id)


@pytest.mark.parametrize("scopes", [[], ["bid", "root"], ["Bid"]])
def test_unknown_scopes_are_refused(database: Database, scopes: list[str]) -> None:
    """No scope, or one that is not ours, makes no key."""
    with pytest.raises(Malformed):
        keys.add(database, "ad server", scopes)
    assert database.read(keys.listed) == []


@pytest.mark.parametrize(
    ("scopes", "scope", "allowed"),
    [
        ({"bid"}, "bid", True),
        ({"bid"}, "report", False),
        ({"operate"}, "admin", False),
        ({"admin"}, "operate", True),
    ],
)
def test_admin_implies_every_scope(scopes: set[str], scope: str, allowed: bool) -> None:
    """A key may do what its scopes name; admin may do everything."""
    assert keys.Key("k", "name", frozenset(scopes)).allows(scope) is allowed
