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


def test_a_limited_key_comes_back_with_its_limits(database: Database) -> None:
    """Only the line items named are reached; a key without limits reaches all."""
    limited, bearer = keys.add(database, "desk", ["read"], line_items=["b", "a"], expires_ms=2**50)

    found = database.read(lambda connection: keys.by_bearer(connection, bearer))
    assert found == limited
    assert (found.line_items, found.until_ms) == (frozenset({"a", "b"}), 2**50)
    assert [found.reaches(name) for name in ("a", "b", "c")] == [True, True, False]
    assert keys.Key("k", "name", frozenset()).reaches("c")


@pytest.mark.parametrize(
    ("wish", "code"),
    [
        (keys.Wish("", ("bid",)), "bad_name"),
        (keys.Wish("a\nb", ("bid",)), "bad_name"),
        (keys.Wish("a", ("root",)), "bad_scope"),
        (keys.Wish("a", ("admin",), ("x",)), "admin_is_not_limited"),
        (keys.Wish("a", ("bid",), ()), "bad_line_items"),
        (keys.Wish("a", ("bid",), ("a b",)), "bad_line_items"),
        (keys.Wish("a", ("bid",), tuple(map(str, range(1001)))), "bad_line_items"),
        (keys.Wish("a", ("bid",), None, 7), "expired_already"),
    ],
)
def test_a_wish_for_no_key_is_refused(wish: keys.Wish, code: str) -> None:
    """With its own code, before anything is written."""
    with pytest.raises(Malformed) as refused:
        wish.object_to(7)
    assert refused.value.code == code


def test_a_rotated_key_keeps_both_texts_for_a_while(database: Database) -> None:
    """The same key under both; the old text ends by itself, and a second turn never prolongs it."""
    key, old = keys.add(database, "desk", ["read"])
    new, newest = keys.new_text(), keys.new_text()

    def turn(bearer: str, now_ms: int, overlap_ms: int) -> None:
        database.write(
            lambda c: keys.renew(
                c, key.id, bearer, now_ms, overlap_ms=overlap_ms, by=("tester", "it is old")
            )
        )

    turn(new, 1000, 500)
    turn(newest, 1100, 10_000)
    ends = [database.read(lambda c, t=t: keys.by_bearer(c, t)) for t in (old, new, newest)]  # type: ignore[misc]
    assert [found.until_ms for found in ends if found] == [1500, 11_100, None]
    assert {found.id for found in ends if found} == {key.id}
    for overlap_ms in (-1, keys.OVERLAP_MS_MAX + 1):
        with pytest.raises(Malformed):
            turn(keys.new_text(), 1, overlap_ms)
    keys.end(database, key.id)
    with pytest.raises(NotFound):
        turn(keys.new_text(), 1, 1)
    assert database.read(lambda c: keys.by_bearer(c, newest)) is None


def test_the_release_before_never_takes_a_limited_key_for_an_unlimited_one(
    database: Database,
) -> None:
    """Its look-up finds plain keys, in their newest text, and no key that has limits."""
    before = text("SELECT name FROM access_key WHERE hash = :hash AND ended_ms IS NULL")

    def seen(bearer: str) -> object:
        row = {"hash": keys.hashed(bearer)}
        return database.read(lambda c: c.execute(before, row).scalar_one_or_none())

    plain, old = keys.add(database, "plain", ["bid"])
    limited, hidden = keys.add(database, "limited", ["bid"], line_items=["a"])
    _, ending = keys.add(database, "ending", ["bid"], expires_ms=2**50)
    assert [seen(bearer) for bearer in (old, hidden, ending)] == ["plain", None, None]
    for key in (plain, limited):
        bearer = keys.new_text()
        database.write(
            lambda c, k=key, b=bearer: keys.renew(c, k.id, b, 1, overlap_ms=0, by=("t", "r"))  # type: ignore[misc]
        )
        assert seen(bearer) == ("plain" if key is plain else None)
    assert seen(old) is None


def test_whatever_happens_to_keys_is_in_the_journal(database: Database) -> None:
    """Made, renewed, ended: by whom and why, and never the text."""
    key, bearer = keys.add(database, "desk", ["read"], by=("tester", "a desk"))
    database.write(
        lambda c: keys.renew(c, key.id, keys.new_text(), 1, overlap_ms=0, by=("tester", "old"))
    )
    keys.end(database, key.id, by=("tester", "gone"))
    rows = database.read(lambda c: c.execute(text("SELECT * FROM journal ORDER BY number")).all())
    assert [(row.action, row.actor, row.reason) for row in rows] == [
        ("key_add", "tester", "a desk"),
        ("key_rotate", "tester", "old"),
        ("key_end", "tester", "gone"),
    ]
    assert bearer not in repr(rows)
    assert all(key.id in row.detail for row in rows)
