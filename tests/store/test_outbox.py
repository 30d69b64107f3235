"""News in its table: due in order, claimed once, tried again, given up, forgotten in pieces."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from sqlalchemy import text

from service.store import outbox
from service.store.database import Database
from service.store.outbox import DUE_MAX, News

NOW_MS = 1_000_000


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=lambda: NOW_MS)
    yield database
    database.close()


def put(
    database: Database, name: str = "garden", at_ms: int = NOW_MS, kind: str = "freeze"
) -> None:
    """One piece of news."""
    database.write(lambda c: outbox.put(c, kind, name, {"b": 1, "a": [2]}, at_ms))


def due(database: Database, at_ms: int = NOW_MS) -> list[News]:
    """What is due at a moment."""
    return database.read(lambda c: outbox.due(c, at_ms))


def standing(database: Database, name: str = "garden") -> dict[str, object]:
    """How the news of a line item fares."""
    return database.read(lambda c: outbox.standing(c, name))


def test_news_comes_back_as_it_was_put(database: Database) -> None:
    """Untried, due at once, with an id that no other news has."""
    put(database)
    put(database)
    first, second = due(database)
    assert (first.kind, first.line_item, first.body) == ("freeze", "garden", {"a": [2], "b": 1})
    assert (first.at_ms, first.next_ms, first.tries) == (NOW_MS, NOW_MS, 0)
    assert first.id != second.id
    assert len(first.id) == 32


def test_the_oldest_is_due_first_and_the_future_is_not(database: Database) -> None:
    """By its moment, then by its number; a moment that is reached is due."""
    for at_ms in (NOW_MS + 1, NOW_MS, NOW_MS - 5, NOW_MS):
        put(database, at_ms=at_ms)
    assert [news.number for news in due(database)] == [3, 2, 4]
    assert [news.number for news in due(database, NOW_MS - 6)] == []


def test_a_flood_is_told_in_pieces(database: Database) -> None:
    """No look takes more than so many; what is told makes room for the rest."""
    for _ in range(DUE_MAX + 2):
        put(database)
    found = due(database)
    assert len(found) == DUE_MAX
    for news in found:
        database.write(lambda c, n=news.number: outbox.sent(c, n))  # type: ignore[misc]
    assert [news.number for news in due(database)] == [DUE_MAX + 1, DUE_MAX + 2]


def test_a_claim_holds_until_its_time_is_over(database: Database) -> None:
    """Of two clerks that saw the same one has it; then whoever comes first has it again."""
    put(database)
    (news,) = due(database)
    assert database.write(lambda c: outbox.claim(c, news, NOW_MS + 10))
    assert not database.write(lambda c: outbox.claim(c, news, NOW_MS + 99))
    assert due(database, NOW_MS + 9) == []
    (again,) = due(database, NOW_MS + 10)
    assert (again.id, again.tries, again.next_ms) == (news.id, 1, NOW_MS + 10)
    assert database.write(lambda c: outbox.claim(c, again, NOW_MS + 20))


@pytest.mark.parametrize("told", [True, False])
def test_what_is_over_is_claimed_no_more(database: Database, told: bool) -> None:
    """Neither what was taken nor what was given up, even by a clerk that has seen it before."""
    put(database)
    (news,) = due(database)
    if told:
        database.write(lambda c: outbox.sent(c, news.number))
    else:
        database.write(lambda c: outbox.failed(c, news.number, "status 500", None))
    assert not database.write(lambda c: outbox.claim(c, news, NOW_MS + 10))
    assert due(database, 2**60) == []
    wanted = {"waiting": 0, "sent": int(told), "given_up": int(not told)}
    assert standing(database) == wanted | {"last_error": None if told else "status 500"}


def test_a_failure_waits_for_its_next_moment(database: Database) -> None:
    """It stays in the queue with what went wrong; a success afterwards wipes that out."""
    put(database)
    (news,) = due(database)
    database.write(lambda c: outbox.failed(c, news.number, "ConnectError", NOW_MS + 50))
    assert due(database, NOW_MS + 49) == []
    assert standing(database) == {
        "waiting": 1, "sent": 0, "given_up": 0, "last_error": "ConnectError"
    }  # fmt: skip
    database.write(lambda c: outbox.sent(c, news.number))
    assert standing(database)["last_error"] is None


def test_a_line_item_without_news_stands_at_nought(database: Database) -> None:
    """And that of another one does not count for it."""
    put(database, "meadow")
    nothing = {"waiting": 0, "sent": 0, "given_up": 0, "last_error": None}
    assert standing(database) == nothing
    assert standing(database, "meadow") == {**nothing, "waiting": 1}


def test_what_is_over_is_forgotten_in_pieces(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The oldest first, never what waits, nor what is as young as the moment."""
    monkeypatch.setattr(outbox, "PRUNED_MAX", 2)
    for at_ms in (1, 2, 3, 4, NOW_MS):
        put(database, at_ms=at_ms)
    database.write(lambda c: c.execute(text("UPDATE outbox SET state = 'sent' WHERE number <> 2")))
    pruned = [database.write(lambda c: outbox.prune(c, NOW_MS)) for _ in range(3)]
    assert pruned == [2, 1, 0]
    left = database.read(lambda c: c.execute(text("SELECT number FROM outbox ORDER BY 1")).all())
    assert [row.number for row in left] == [2, 5]


def test_where_nobody_is_told_what_waits_is_dropped(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """In pieces too; what was once told stays until it is old."""
    monkeypatch.setattr(outbox, "PRUNED_MAX", 2)
    for _ in range(4):
        put(database)
    database.write(lambda c: outbox.sent(c, 1))
    assert [database.write(outbox.drop) for _ in range(3)] == [2, 1, 0]
    assert standing(database)["sent"] == 1
