"""What the clerk does over a real database: lessons, closing, audit, forgetting."""

from __future__ import annotations

import json

import pytest

from service.store import changes, learners
from service.store.decisions import quarantine
from tests.builders import GRACE_MS, LEASE_S, NAME, PRICE, line_item, working
from tests.test_upkeep import MEAN, WORTH, learner, win

pytestmark = pytest.mark.anyio

DAY_MS = 86_400_000


async def test_windows_mature_and_teach(migrated_url: str) -> None:
    """A win is known when its window has closed, with all that it brought."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN, value={"arrival": "accrues", "window_ms": 60_000})
        await win(worker, 2, WORTH)
        await worker.learn()
        assert (await learner(worker))["wins_with_known_value"] == 0
        worker.pass_service_ms(62_000)
        await worker.bids(1)
        await worker.leasing.tick()
        await worker.learn()
        assert (await learner(worker))["wins_with_known_value"] == 2
        assert (await worker.operator.state(NAME))["certainty"]["mean_nanos"] == WORTH


async def test_the_audit_freezes_what_was_altered(migrated_url: str) -> None:
    """The line item says by how much it is off, in the journal too, and its neighbour bids on."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bids(1, name)
        await worker.clerk.audit()
        await worker.upkeep.follow()
        assert worker.column("SELECT line_item FROM freezing") == []
        worker.run("UPDATE balance SET held = held + 7 WHERE line_item = :id", id=NAME)
        await worker.clerk.audit()
        await worker.clerk.audit()
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "frozen"
        assert (await worker.bid("meadow")).bid == PRICE
        (freeze,) = (await worker.operator.get(NAME)).freezes
        assert freeze["source"] == "audit"
        assert freeze["reason"] == "V2 held = sum of what slices hold: off by 7"
        (detail,) = worker.column("SELECT detail FROM journal WHERE action = 'freeze'")
        assert [found["off"] for found in json.loads(detail)["findings"]] == [7]


async def test_what_is_older_than_its_setting_is_forgotten(migrated_url: str) -> None:
    """Decisions after 30 days, repeat guards after 7, quarantine after 90; younger ones stay."""
    async with working(migrated_url) as worker:
        await worker.operator.create(line_item(), None, "tester", "once")
        await worker.bids(2)
        await worker.upkeep.log()
        for table, days in (("decision", 30), ("repeat_guard", 7), ("quarantine", 90)):
            old = worker.database.wall_ms() - days * DAY_MS - 1000
            if table == "quarantine":
                worker.database.write(lambda c, at=old: quarantine(c, NAME, "old", {}, at))  # type: ignore[misc]
                worker.database.write(lambda c, at=old: quarantine(c, NAME, "new", {}, at + 9000))  # type: ignore[misc]
                continue
            limit = " AND number = 1" if table == "decision" else ""
            worker.run(f"UPDATE {table} SET at_ms = :old WHERE 1 = 1{limit}", old=old)  # noqa: S608
        await worker.clerk.prune()
        assert worker.column("SELECT number FROM decision") == [2]
        assert worker.column("SELECT repeat_key FROM repeat_guard") == []
        assert worker.column("SELECT error FROM quarantine") == ["new"]


async def test_a_closed_slice_is_forgotten_when_it_is_audited(migrated_url: str) -> None:
    """Two days after its grace; a worker that slept through the changes reads all afresh."""
    async with working(migrated_url) as worker, working(migrated_url, "two") as asleep:
        await worker.create()
        await asleep.bid(test=True)
        await worker.bids(1)
        worker.clock.now += LEASE_S
        await worker.upkeep.give_back()
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS)
        await worker.keep_time()
        worker.pass_service_ms(4 * DAY_MS)
        await worker.bids(1)
        await worker.clerk.prune()
        assert worker.one("SELECT count(*) FROM slice") == 2
        await worker.clerk.audit()
        await worker.clerk.prune()
        assert worker.column("SELECT state FROM slice") == ["open"]
        assert worker.audit() == []

        await worker.operator.freeze(NAME, "a look", "tester")
        worker.database.write(lambda c: changes.announce(c, "keys", ["a"]))
        await worker.upkeep.follow()
        await worker.clerk.prune()
        assert worker.one("SELECT count(*) FROM change_log") == 1
        await asleep.upkeep.follow()
        assert (await asleep.bid()).reason == "frozen"


async def test_the_clerk_finds_a_stream_that_disagrees(migrated_url: str) -> None:
    """A spend moved by hand within one line item freezes it within one look, and no other."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bids(1, name)
        await worker.clerk.audit()
        assert worker.column("SELECT line_item FROM freezing") == []
        moved = (
            "UPDATE balance SET spent = spent + 7, unfunded = unfunded + 2 WHERE line_item = :id"
        )
        worker.run(moved, id="meadow")
        await worker.clerk.audit()
        (reason,) = worker.column("SELECT reason FROM freezing WHERE line_item = 'meadow'")
        assert reason == "V3 accepted costs = spent + unfunded + disputed: off by 9"
        assert worker.column("SELECT line_item FROM freezing") == ["meadow"]


async def test_a_state_that_cannot_be_read_is_folded_again(migrated_url: str) -> None:
    """One of another release, or a damaged one, costs a refold and nothing else."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await win(worker, 2, WORTH)
        await worker.learn()
        sound = worker.one("SELECT state FROM learner")
        worker.run("UPDATE learner SET working = :state, state = :state", state=b"?")
        await win(worker, 1, WORTH)
        await worker.learn()
        assert (await learner(worker))["wins_with_known_value"] == 3
        assert bytes(worker.one("SELECT state FROM learner")) != bytes(sound)


async def test_an_idle_line_item_of_another_release_bids_again(migrated_url: str) -> None:
    """Where nobody can bid nothing new is written, so a starting worker reads all states."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await win(worker, 2, WORTH)
        await worker.learn()
        digest = learners.digest_of(b'{"form":1}')
        worker.run(
            "UPDATE learner SET working = :state, state = :state, digest = :digest",
            state=b'{"form":1}',
            digest=digest,
        )
    async with working(migrated_url, "two") as two:
        await two.learn()
        assert (await learner(two))["wins_with_known_value"] == 2
        assert (await two.bid()).bid is not None


async def test_the_slice_of_a_dead_worker_closes_after_grace(migrated_url: str) -> None:
    """Nobody need know that it died: another worker's upkeep frees what it held."""
    async with working(migrated_url) as dead:
        await dead.create()
        await dead.bids(1)
    async with working(migrated_url, "two") as worker:
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS - 5000)
        await worker.keep_time()
        assert worker.balance()["held"] > 0
        worker.pass_service_ms(5000)
        await worker.keep_time()
        assert worker.balance()["held"] == 0
        assert worker.column("SELECT state FROM slice") == ["closed"]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_the_clerk_watches_every_line_item_once_a_minute(migrated_url: str) -> None:
    """Those with news of any kind, page after page; one that is quiet costs nothing."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bids(1, name)
        await worker.clerk.watch()
        marks = worker.column("SELECT line_item FROM tripwire_mark ORDER BY line_item")
        assert marks == [NAME, "meadow"]
        await worker.bids(1)
        await worker.leasing.tick()
        await worker.clerk.watch()
        assert worker.one("SELECT coalesce(sum(bids), 0) FROM tripwire_bucket") == 0
        worker.run("UPDATE tripwire_mark SET looked_ms = looked_ms - 60000")
        worker.run("UPDATE balance SET unfunded = 5 WHERE line_item = 'meadow'")
        await worker.clerk.watch()
        assert worker.one("SELECT sum(bids) FROM tripwire_bucket WHERE width = 0") == 3
        assert worker.column("SELECT rule FROM tripwire_finding") == ["unfunded"]
        await worker.clerk.tell()
        assert worker.column("SELECT id FROM outbox") == []
