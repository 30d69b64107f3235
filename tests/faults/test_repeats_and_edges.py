"""Replays, twins of one request, uneven deployments and budgets at both ends of the range."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import closing

import pytest

from service.feedback import Report
from service.money import NANOS_MAX
from service.store import outcomes
from service.store.database import Database
from tests.builders import NAME, PRICE, working
from tests.money.faulty import everything
from tests.money.scene import CAP, Bid, Scene

ROWS = 500


@pytest.fixture
def database(migrated_url: str) -> Iterator[Database]:
    """Each database in turn."""
    with closing(Database(migrated_url, pool_size=2)) as database:
        yield database


@pytest.mark.anyio
async def test_twins_of_one_request_have_holds_of_their_own(migrated_url: str) -> None:
    """An exchange that asks twice may buy twice: two bids, two holds, two outcomes."""
    async with working(migrated_url) as worker:
        await worker.create()
        first, second = [await worker.bid(request_id="same") for _ in range(2)]
        assert first.ref != second.ref
        assert worker.leasing.hand.slices[NAME].issued == 2 * PRICE
        told = [Report("won", answer.ticket, clearing=PRICE) for answer in (first, second)]
        assert [r.status for r in await worker.report(*told)] == ["recorded"] * 2
        assert worker.balance()["spent"] == 2 * PRICE


@pytest.mark.anyio
async def test_a_ticket_with_the_ref_of_another_impression_is_refused(migrated_url: str) -> None:
    """Of two impressions of one page the notice names one; a mixture of both books nothing."""
    async with working(migrated_url) as worker:
        await worker.create()
        first, second = await worker.bids(2)
        mixed = Report("won", first.ticket, ref=second.ref, clearing=PRICE)
        receipt = (await worker.report(mixed))[0]
        assert (receipt.status, receipt.code) == ("refused", "ref_of_another_bid")
        assert worker.balance()["spent"] == 0


def test_a_replay_of_everything_changes_nothing(database: Database) -> None:
    """A source that sends its whole past again gets duplicates, and no row moves."""
    scene = Scene(database, budget=10**7)
    bids: list[Bid] = []
    while len(bids) < ROWS:
        scene.lease()
        bids += [scene.placed(8) for _ in range(16)]
    group = [scene.told(bid, "won" if n % 2 else "lost", 7) for n, bid in enumerate(bids)]
    assert set(scene.book(*group)) == {"recorded"}
    before = everything(database)
    for first in range(0, len(group), 200):
        booked = outcomes.book(database, group[first : first + 200])
        assert {one.status for one in booked} == {"duplicate"}
    assert everything(database) == before
    assert scene.faults() == []


@pytest.mark.anyio
async def test_workers_of_different_settings_share_one_promise(migrated_url: str) -> None:
    """A slice keeps the times it was leased with, so another lease_s next door harms nobody."""
    async with (
        working(migrated_url, "short", lease_s=2) as short,
        working(migrated_url, "long", lease_s=300) as long,
    ):
        await short.create(budget=40 * PRICE, bid_cap=PRICE)
        answers = [*await short.bids(4), *await long.bids(4)]
        told = [Report("won", answer.ticket, clearing=PRICE) for answer in answers]
        # Whoever settles, the slice is found by its ticket.
        assert {r.status for r in await long.report(*told)} == {"recorded"}
        assert short.balance()["spent"] == 8 * PRICE
        assert short.audit() == []


@pytest.mark.parametrize("budget", [0, 1, CAP - 1, CAP, NANOS_MAX])
def test_budgets_at_the_ends_of_the_range(database: Database, budget: int) -> None:
    """From nothing to the largest amount there is, no more is bid than is there."""
    scene = Scene(database, budget=budget)
    leased = scene.lease()
    assert leased == min(budget, 16 * CAP)
    bid = scene.bid()
    if budget == 0:
        assert bid is None
        return
    assert bid is not None
    assert bid.hold == min(budget, CAP)
    assert scene.tell(bid, "won", bid.hold) == "recorded"
    assert scene.balance()["spent"] == bid.hold
    assert scene.faults() == []
