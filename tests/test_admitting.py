"""Ends by the clock, last use and refusals: nothing that a price waits for, and nothing lost."""

from __future__ import annotations

import pytest
from sqlalchemy import text

from service.admitting import PLACES_MAX
from service.errors import StoreAway
from service.store import keys, refusals
from tests.builders import Worker, outage, working

pytestmark = pytest.mark.anyio

NOW_MS = 1_796_000_000_000
HOUR_MS = 3_600_000


def at(worker: Worker, now_ms: int) -> None:
    """Set the wall clock of the database's people."""
    worker.database.wall_ms = lambda: now_ms


async def test_a_key_ends_by_the_clock_without_a_look(migrated_url: str) -> None:
    """The moment is reached while the key is cached: unknown at once, no change needed."""
    async with working(migrated_url) as worker:
        at(worker, NOW_MS)
        key, bearer = keys.add(worker.database, "desk", ["bid"], expires_ms=NOW_MS + HOUR_MS)
        assert await worker.catalog.key_for(bearer) == key
        seen = worker.catalog.change_seen
        at(worker, NOW_MS + HOUR_MS - 1)
        assert await worker.catalog.key_for(bearer) == key
        at(worker, NOW_MS + HOUR_MS)
        assert await worker.catalog.key_for(bearer) is None
        assert worker.catalog.change_seen == seen


async def test_a_cached_key_is_never_read_again(migrated_url: str) -> None:
    """Known keys, limited or not, cost no look at the database: with it away they still open."""
    async with working(migrated_url) as worker:
        at(worker, NOW_MS)
        texts = [
            keys.add(worker.database, "one", ["bid"])[1],
            keys.add(worker.database, "two", ["bid"], line_items=["a"])[1],
            keys.add(worker.database, "three", ["bid"], expires_ms=NOW_MS + HOUR_MS)[1],
        ]
        before = [await worker.catalog.key_for(bearer) for bearer in texts]
        worker.threads.run = unreachable  # type: ignore[method-assign,assignment]
        assert [await worker.catalog.key_for(bearer) for bearer in texts] == before
        assert None not in before


async def unreachable(*_: object) -> None:
    """A thread that nobody may ask for."""
    raise AssertionError("a look at the database")


async def test_last_use_is_written_once_a_minute(migrated_url: str) -> None:
    """The first use of a minute is written, a second one in it is not, the next minute's is."""
    async with working(migrated_url) as worker:
        admitting = worker.operator.admitting
        key, bearer = keys.add(worker.database, "desk", ["bid"])
        assert worker.one("SELECT used_ms FROM access_key") is None
        written = []
        for now_ms in (NOW_MS, NOW_MS + 5000, NOW_MS + 65_000, NOW_MS + 300_000):
            at(worker, now_ms)
            if now_ms < NOW_MS + 300_000:
                assert await worker.catalog.key_for(bearer) == key
            await admitting.flush()
            written.append(worker.one("SELECT used_ms FROM access_key") - NOW_MS)
        assert written == [0, 0, 65_000, 65_000]


async def test_refusals_are_added_up_and_bounded(migrated_url: str) -> None:
    """By minute, key, route and code; what would be too much shares one row; the old is pruned."""
    async with working(migrated_url) as worker:
        admitting = worker.operator.admitting
        for minute in (0, 1):
            at(worker, NOW_MS + minute * 60_000)
            for _ in range(3):
                admitting.refused("k1", "POST /v1/bids", "scope_missing")
            await admitting.flush()
        admitting.refused("k1", "POST /v1/bids", "scope_missing")
        rows = await admitting.refusals(None, 10)
        assert [row["count"] for row in rows] == [4, 3]
        assert [row["number"] for row in await admitting.refusals(rows[0]["number"], 1)] == [
            rows[1]["number"]
        ]
        for n in range(PLACES_MAX + 50):
            admitting.refused(f"k{n}", "POST /v1/bids", "unknown_key")
        await admitting.flush()
        assert worker.one("SELECT count(*) FROM refusal") == PLACES_MAX + 3
        assert worker.one("SELECT count FROM refusal WHERE code = 'further'") == 50
        minute = NOW_MS + 60_000 - (NOW_MS + 60_000) % 60_000
        assert worker.database.write(lambda c: refusals.prune(c, minute)) == 1
        assert worker.database.write(lambda c: refusals.prune(c, minute)) == 0


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_refusals_wait_while_the_database_is_away(migrated_url: str) -> None:
    """They are written when it is back; a stop meanwhile says so and raises nothing."""
    async with working(migrated_url) as worker:
        admitting = worker.operator.admitting
        admitting.refused("", "POST /v1/bids", "no_key")
        with outage(migrated_url):
            with pytest.raises(StoreAway):
                await admitting.flush()
            await admitting.stop()
        await admitting.flush()
        assert worker.one("SELECT sum(count) FROM refusal") == 1


async def test_the_text_of_a_key_is_kept_nowhere(migrated_url: str) -> None:
    """Not with the answer that a repeat would get, either."""
    async with working(migrated_url) as worker:
        wish = keys.Wish("desk", ("bid",))
        admitting = worker.operator.admitting
        first = await admitting.add(wish, "a desk", "tester", "once")
        turned = await admitting.rotate(first["id"], 0, "it is old", "tester", "twice")
        again = await admitting.rotate(first["id"], 0, "it is old", "tester", "twice")
        assert (again["key"], again["id"]) == (None, first["id"])
        tables = ("repeat_guard", "journal", "key_text", "access_key", "change_log")

        def rows(connection: object) -> str:
            run = connection.execute  # type: ignore[attr-defined]
            return repr([run(text(f"SELECT * FROM {table}")).all() for table in tables])  # noqa: S608

        kept = worker.database.read(rows)
        assert first["key"] not in kept
        assert turned["key"] not in kept
        assert first["id"] in kept
