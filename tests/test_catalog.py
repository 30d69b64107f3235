"""What a worker knows of line items and keys: misses for a moment, changes by their number."""

from __future__ import annotations

import asyncio
import contextlib
import time

import pytest
from sqlalchemy import event

from service.catalog import MISS_S, Catalog
from service.errors import NotFound, StoreAway
from service.store import changes, keys
from tests.builders import CAP, NAME, PRICE, Worker, append, begin, outage, won, working

pytestmark = pytest.mark.anyio


class Reads:
    """Counts the statements that a worker's database is asked."""

    def __init__(self, worker: Worker) -> None:
        self.count = 0
        event.listen(worker.database.engine, "before_cursor_execute", self._seen)

    def _seen(self, *_arguments: object) -> None:
        self.count += 1


def announce(worker: Worker, kind: str, name: str) -> None:
    """Say that something has changed."""
    worker.database.write(lambda connection: changes.announce(connection, kind, [name]))


async def test_what_is_known_is_never_read_again(migrated_url: str) -> None:
    """The hot path is a dictionary: one look-up, then no statement at all."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        item = await worker.catalog.look_up(NAME)
        assert (item.limits.cap, item.terms.settings["price"]) == (CAP, PRICE)
        reads = Reads(worker)
        assert worker.catalog.get(NAME) is item
        assert reads.count == 0


async def test_a_miss_is_remembered_for_a_moment(migrated_url: str) -> None:
    """A caller with a wrong name costs one read a second, however often it asks."""
    async with working(migrated_url) as worker:
        began = time.monotonic()
        with pytest.raises(NotFound):
            await worker.catalog.look_up(NAME)
        reads = Reads(worker)
        with pytest.raises(NotFound):
            await worker.catalog.look_up(NAME)
        assert reads.count == 0
        begin(worker.database)
        # Nothing was announced, so only time ends the miss.
        async with asyncio.timeout(5):
            while worker.catalog.get(NAME) is None:
                await asyncio.sleep(0.05)
                with contextlib.suppress(NotFound):
                    await worker.catalog.look_up(NAME)
        assert MISS_S <= time.monotonic() - began


async def test_a_change_ends_every_miss(migrated_url: str) -> None:
    """What was just created is found at the next look at the changes."""
    async with working(migrated_url) as worker:
        with pytest.raises(NotFound):
            await worker.catalog.look_up(NAME)
        begin(worker.database)
        announce(worker, "line_item", NAME)
        assert await worker.catalog.follow() == ([], True)
        assert (await worker.catalog.look_up(NAME)).id == NAME


async def test_only_what_is_known_is_renewed(migrated_url: str) -> None:
    """A worker follows its own line items, and all of them when a change concerns all."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow", "forest"):
            begin(worker.database, id=name)
        for name in (NAME, "meadow"):
            await worker.catalog.look_up(name)
        announce(worker, "line_item", "forest")
        announce(worker, "line_item", NAME)
        assert [item.id for item in (await worker.catalog.follow())[0]] == [NAME]
        announce(worker, "freeze", changes.ALL)
        assert [item.id for item in (await worker.catalog.follow())[0]] == [NAME, "meadow"]
        assert worker.catalog.get("forest") is None
        assert await worker.catalog.follow() == ([], False)


async def test_following_goes_on_from_the_last_number(migrated_url: str) -> None:
    """A worker that starts has nothing to renew; later each number is applied once."""
    async with working(migrated_url) as worker:
        for _ in range(3):
            announce(worker, "snapshot", "forest")
        fresh = Catalog(worker.database, worker.threads)
        await fresh.start()
        assert fresh.change_seen == 3
        announce(worker, "snapshot", "forest")
        await fresh.follow()
        assert fresh.change_seen == 4


async def test_a_damaged_snapshot_leaves_the_last_good_one(migrated_url: str) -> None:
    """Bidding goes on from what was sound; without any, there is nothing to bid from."""
    async with working(migrated_url) as worker:
        begin(worker.database, policy={"method": "mean"})
        append(worker.database, won(1))
        before = await worker.catalog.look_up(NAME)
        worker.run("UPDATE learner SET digest = 'another', snapshot = 9")
        (after,) = await worker.catalog.renew([NAME])
        assert (after.snapshot, after.ready) == (before.snapshot, before.ready)
        assert after.ready is not None
        fresh = Catalog(worker.database, worker.threads)
        assert (await fresh.look_up(NAME)).ready is None


async def test_a_freeze_of_all_is_a_limit_of_each(migrated_url: str) -> None:
    """The switch over all stands among the freezes of every line item."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        assert not (await worker.catalog.look_up(NAME)).limits.frozen
        worker.run("INSERT INTO freezing VALUES ('*', 'all', 1, 'tester', 'a look')")
        announce(worker, "freeze", changes.ALL)
        (item,), ordered = await worker.catalog.follow()
        assert ordered
        assert item.limits.frozen


async def test_terms_are_read_again_when_the_configuration_changes(migrated_url: str) -> None:
    """A snapshot of the same version keeps them, and a new version has its own."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        before = await worker.catalog.look_up(NAME)
        append(worker.database, won(1))
        await worker.learn()
        learnt = worker.catalog.get(NAME)
        assert learnt is not None
        assert (learnt.snapshot > before.snapshot, learnt.terms is before.terms) == (True, True)

        await worker.operator.patch(NAME, {"bid_cap": CAP // 2}, 1, None, None, "tester")
        await worker.upkeep.follow()
        changed = worker.catalog.get(NAME)
        assert changed is not None
        assert (changed.version, changed.terms.cap) == (2, CAP // 2)
        assert changed.ready is not None
        assert changed.ready.terms.cap == CAP // 2


async def test_a_key_opens_until_it_ends(migrated_url: str) -> None:
    """It is read once, and forgotten when the change says so; unknown ones are misses."""
    async with working(migrated_url) as worker:
        assert await worker.catalog.key_for("nobody") is None
        key, bearer = keys.add(worker.database, "tests", ["bid"])
        found = await worker.catalog.key_for(bearer)
        assert (found, found and found.allows("bid"), found and found.allows("operate")) == (
            *(key, True, False),
        )
        reads = Reads(worker)
        assert await worker.catalog.key_for(bearer) == key
        assert await worker.catalog.key_for("nobody") is None
        assert reads.count == 0
        keys.end(worker.database, key.id)
        await worker.catalog.follow()
        assert await worker.catalog.key_for(bearer) is None


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_an_absent_database_is_no_miss(migrated_url: str) -> None:
    """What could not be looked up is not unknown: the next caller asks again."""
    async with working(migrated_url) as worker:
        begin(worker.database)
        _, bearer = keys.add(worker.database, "tests", ["bid"])
        with outage(migrated_url):
            with pytest.raises(StoreAway):
                await worker.catalog.look_up(NAME)
            with pytest.raises(StoreAway):
                await worker.catalog.key_for(bearer)
        assert (await worker.catalog.look_up(NAME)).id == NAME
        assert await worker.catalog.key_for(bearer) is not None
