"""Interleavings that have broken such designs before, each played out by hand."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise
from service.store import changes, clock, line_items, outcomes
from service.store.bookings import Booking
from service.store.database import Database, Writing
from tests.builders import begin
from tests.money.scene import GRACE_MS, LEASE_MS, NAME, Bid, Scene

MINUTE_MS = 60_000
HOUR_MS = 60 * MINUTE_MS
CLOSE_MS = LEASE_MS + GRACE_MS
RACES = 8


@pytest.fixture
def database(migrated_url: str) -> Iterator[Database]:
    """Each database in turn, with a connection for each side of a race."""
    with closing(Database(migrated_url, pool_size=3)) as database:
        yield database


def crashed(scene: Scene) -> Bid:
    """A bid whose worker is gone; its slice is about to close."""
    scene.lease()
    bid = scene.placed(8)
    scene.crash()
    return bid


def close_with(scene: Scene, start: threading.Barrier) -> int:
    """Close at the moment at which the other side starts too."""
    start.wait(10)
    return scene.close()


def book_with(database: Database, booking: Booking, start: threading.Barrier) -> str:
    """Book at that moment."""
    start.wait(10)
    return outcomes.book(database, [booking])[0].status


def seconds_pass(scene: Scene, seconds: int) -> None:
    """Upkeep ticks once a second, as the wall clock goes on."""
    for _ in range(seconds):
        scene.wall_ms += 1000
        now = scene.database.write(lambda c: clock.advance(c, scene.wall_ms))
        scene.now_ms = now


def test_a_win_between_retiring_and_closing_has_its_hold(database: Database) -> None:
    """Retiring freed only what was never issued; closing then finds nothing left of the win."""
    scene = Scene(database)
    amount = scene.lease()
    won, silent = scene.placed(8), scene.placed(9)
    scene.retire()
    assert scene.balance()["held"] == 17 < amount
    assert scene.tell(won, "won", 5) == "recorded"
    assert scene.balance()["held"] == silent.hold
    scene.pass_ms(CLOSE_MS)
    assert scene.close() == 1
    assert (scene.balance()["spent"], scene.balance()["held"]) == (5, 0)
    assert scene.faults() == []


def test_closing_may_race_a_win(database: Database) -> None:
    """At the same instant from two connections: in time or late, but once and within budget."""
    scene = Scene(database, budget=1_000)
    seen = set()
    with ThreadPoolExecutor(2) as pool:
        for _ in range(RACES):
            bid = crashed(scene)
            scene.pass_ms(CLOSE_MS)
            booking, start = scene.told(bid, "won", 7), threading.Barrier(2)
            scene.exchange.hear(bid.id, "won", 7)
            closes = pool.submit(close_with, scene, start)
            seen.add(pool.submit(book_with, database, booking, start).result())
            assert closes.result() == 1
            assert scene.balance()["held"] == 0
            assert scene.faults() == []
    assert scene.balance()["spent"] == 7 * RACES
    assert seen <= {"recorded", "late"}


def test_twenty_minutes_without_the_database_close_nothing(database: Database) -> None:
    """With fifteen minutes of grace, a win that waited for twenty still has its hold."""
    scene = Scene(database, grace_ms=15 * MINUTE_MS)
    seconds_pass(scene, 2)
    scene.lease()
    bid = scene.placed(8)
    seconds_pass(scene, 5)
    scene.wall_ms += 20 * MINUTE_MS
    seconds_pass(scene, 1)
    assert scene.close() == 0
    assert scene.tell(bid, "won", 8) == "recorded"
    assert scene.balance()["unfunded"] == 0
    assert scene.faults() == []


@pytest.mark.parametrize("step_ms", [HOUR_MS, -HOUR_MS])
def test_a_step_of_the_clock_moves_no_money(database: Database, step_ms: int) -> None:
    """An hour forward or back: no slice closes or lives on for it, and grace ends on time."""
    scene = Scene(database)
    seconds_pass(scene, 2)
    bid = crashed(scene)
    closes_ms = scene.now_ms + CLOSE_MS
    seconds_pass(scene, 1)
    scene.wall_ms += step_ms
    seconds_pass(scene, 3)
    assert closes_ms - scene.now_ms > CLOSE_MS - 10_000
    assert scene.close() == 0
    assert scene.tell(bid, "won", 8) == "recorded"
    seconds_pass(scene, CLOSE_MS // 1000)
    assert scene.now_ms >= closes_ms
    assert scene.close() == 1
    assert scene.faults() == []


def test_an_edit_that_commits_late_is_not_missed(database: Database) -> None:
    """While it is open nobody can take a later number, so who follows sees both in order."""
    for name in ("early", "late"):
        begin(database, id=name)
    numbered, go = threading.Event(), threading.Event()

    def slow(connection: Writing) -> None:
        changes.announce(connection, "edit", ["late"])
        numbered.set()
        go.wait(10)

    def quick(connection: Writing) -> None:
        changes.announce(connection, "edit", ["early"])

    last = database.read(changes.latest)
    with ThreadPoolExecutor(2) as pool:
        first = pool.submit(database.write, slow)
        numbered.wait(10)
        second = pool.submit(database.write, quick)
        assert database.read(changes.latest) == last
        go.set()
        first.result(), second.result()
    seen = database.read(lambda c: changes.since(c, last))
    assert [(number - last, line_item) for number, _, line_item in seen] == [
        (1, "late"),
        (2, "early"),
    ]


def test_a_budget_edit_that_commits_late_holds_back_the_lease(database: Database) -> None:
    """A lease waits for an edit that is open, and then obeys it."""
    scene = Scene(database)
    lowered, go = {**scene.config, "budget": 5}, threading.Event()
    edited = threading.Event()

    def edit(connection: Writing) -> None:
        line_items.change(connection, lowered, 1, scene.wall_ms)
        edited.set()
        go.wait(10)

    with ThreadPoolExecutor(2) as pool:
        edits = pool.submit(database.write, edit)
        edited.wait(10)
        leases = pool.submit(scene.lease)
        go.set()
        edits.result()
        assert leases.result() == 5
    scene.config = lowered
    assert scene.one("SELECT budget FROM balance WHERE line_item = :id", id=NAME) == 5
    assert scene.faults() == []


@pytest.mark.parametrize("spend_on", ["won", "billed"])
def test_a_bill_before_its_win_pays_once(database: Database, spend_on: str) -> None:
    """The bill books the cost; the win that follows moves nothing, whatever counts as spend."""
    scene = Scene(database, spend_on)
    scene.lease()
    bid = scene.placed(8)
    assert scene.tell(bid, "billed", 6) == "recorded"
    before = scene.balance()
    assert before["spent"] == 6
    assert scene.tell(bid, "won", 6) == "recorded"
    after = scene.balance()
    assert {**after, "seq": 0, "at_ms": 0} == {**before, "seq": 0, "at_ms": 0}
    assert scene.faults() == []


def test_a_win_after_a_loss_is_booked_late_and_once(database: Database) -> None:
    """The loss freed the hold; the win is a conflict that takes free money, however often told."""
    scene = Scene(database)
    amount = scene.lease()
    bid = scene.placed(8)
    assert scene.tell(bid, "lost", 9) == "recorded"
    assert scene.balance()["held"] == amount - 8
    assert scene.tell(bid, "won", 6) == "conflict"
    assert scene.tell(bid, "won", 6) in ("conflict", "duplicate")
    assert (scene.balance()["spent"], scene.balance()["held"]) == (6, amount - 8)
    assert scene.faults() == []


def test_one_row_that_cannot_be_booked_spoils_no_other(database: Database) -> None:
    """Its group is undone as a whole and told again without it; the others are there once."""
    scene = Scene(database)
    scene.lease()
    good, bad = scene.placed(8), scene.placed(8)
    group = [scene.told(good, "won", 7), scene.told(bad, "won", 7)]
    raise_it = text("UPDATE slice SET remaining = 8, amount = 8")
    before = scene.one("SELECT remaining FROM slice")
    database.write(lambda c: c.execute(raise_it))
    with pytest.raises(BrokenPromise):
        outcomes.book(database, group)
    assert scene.balance()["spent"] == 0
    restore = text("UPDATE slice SET remaining = :was, amount = :was")
    database.write(lambda c: c.execute(restore, {"was": before}))
    assert scene.book(group[0]) == ["recorded"]
    assert scene.book(*group) == ["duplicate", "recorded"]
    assert scene.balance()["spent"] == 14
    assert scene.faults() == []
