"""The n-th statement fails, for n = 1, 2, 3 …: all or nothing each time, and a retry is once."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import closing

import pytest

from service.errors import StoreAway
from service.store import leases, outcomes, teachers
from service.store.database import TRIES_MAX, Database
from service.store.leases import LeaseRequest, Report
from service.teaching import lawful, lesson
from tests.money.faulty import Faults, everything, failing, losing_the_answer
from tests.money.scene import CAP, GRACE_MS, LEASE_MS, LEASE_S, NAME, Scene

Act = Callable[[], object]
Play = Callable[[Scene], tuple[Act, str]]
STATEMENTS_MAX = 60


@pytest.fixture
def scene(migrated_url: str) -> Iterator[Scene]:
    """A line item with plenty of money, on each database; its books agree at the end."""
    with closing(Database(migrated_url, pool_size=2)) as database:
        scene = Scene(database, budget=1_000_000)
        yield scene
        assert scene.faults() == []


def lease(scene: Scene) -> tuple[Act, str]:
    """Hold money for a slice; each try is a new slice, as a worker asks for it."""

    def act() -> None:
        request = LeaseRequest(NAME, scene._fresh(), CAP, CAP)
        leases.lease(scene.database, "one", [request], LEASE_S)

    return act, "lease"


def settle(scene: Scene) -> tuple[Act, str]:
    """A win with its price."""
    scene.lease()
    bid = scene.placed(8)
    scene.exchange.hear(bid.id, "won", 7)
    booking = scene.told(bid, "won", 7)
    return lambda: outcomes.book(scene.database, [booking]), "won"


def retire(scene: Scene) -> tuple[Act, str]:
    """Free what a slice never issued."""
    scene.lease()
    scene.placed(8)
    scene.hand().retire_all()
    given = scene.hand().given.pop()
    scene.retire()
    report = Report(NAME, given.id, given.bids, 0, given.issued)
    return lambda: leases.retire(scene.database, [report]), "retire"


def close(scene: Scene) -> tuple[Act, str]:
    """Close a slice whose grace is over."""
    scene.lease()
    scene.placed(8)
    scene.crash()
    scene.pass_ms(LEASE_MS + GRACE_MS)
    return lambda: leases.close_due(scene.database), "close"


def teach(scene: Scene) -> tuple[Act, str]:
    """Fold what is new; seen by the learner's row, not by an entry."""
    settle(scene)[0]()
    return lambda: teachers.teach(scene.database, NAME, lesson, 1, lawful), "taught"


PLAYS: list[Play] = [lease, settle, retire, close, teach]


def entries(scene: Scene, kind: str) -> int:
    """How often it has taken effect: entries of its kind, or how far the learner has read."""
    if kind == "taught":
        return int(scene.one("SELECT count(*) FROM checkpoint"))
    return int(scene.one("SELECT count(*) FROM stream WHERE kind = :kind", kind=kind))


@pytest.mark.parametrize("from_then_on", [False, True])
@pytest.mark.parametrize("play", PLAYS)
def test_the_nth_statement_may_fail(scene: Scene, play: Play, from_then_on: bool) -> None:
    """Whichever it is, nothing has happened; repeated, it happens once; until all are tried."""
    for number in range(1, STATEMENTS_MAX):
        act, kind = play(scene)
        before, count = everything(scene.database), entries(scene, kind)
        with failing(scene.database, Faults(number, from_then_on=from_then_on)) as faults:
            try:
                act()
            except StoreAway:
                assert faults.struck
        if not faults.struck:
            break
        assert everything(scene.database) == before, number
        act()
        assert entries(scene, kind) == count + 1, number
    assert 3 < number < STATEMENTS_MAX - 1


@pytest.mark.parametrize("play", PLAYS)
def test_a_deadlock_at_the_nth_statement_costs_nothing(scene: Scene, play: Play) -> None:
    """The whole transaction is repeated inside the call, and has happened once."""
    for number in range(1, STATEMENTS_MAX):
        act, kind = play(scene)
        count = entries(scene, kind)
        faults = Faults(number, from_then_on=False, sqlstate="40001")
        with failing(scene.database, faults):
            try:
                act()
            except StoreAway:
                # Reads are not repeated: whoever only looked looks again by itself.
                assert kind == "close"
                act()
        if not faults.struck:
            break
        assert entries(scene, kind) == count + 1, number
    assert 3 < number < STATEMENTS_MAX - 1


def test_an_endless_deadlock_is_given_up(scene: Scene) -> None:
    """After five tries the caller is told, and nothing has happened."""
    act, _ = settle(scene)
    before = everything(scene.database)
    faults = Faults(2, from_then_on=True, sqlstate="40P01")
    with failing(scene.database, faults), pytest.raises(StoreAway):
        act()
    assert faults.seen >= TRIES_MAX
    assert everything(scene.database) == before
    act()


@pytest.mark.parametrize("play", [settle, retire, close, teach])
def test_a_commit_whose_answer_is_lost_is_not_done_twice(scene: Scene, play: Play) -> None:
    """The caller does not know; when it sends the same again, nothing happens a second time."""
    act, kind = play(scene)
    count = entries(scene, kind)
    # Closing looks first, in a transaction of its own.
    looks = 1 if play is close else 0
    with losing_the_answer(scene.database, looks), pytest.raises(StoreAway):
        act()
    after = everything(scene.database)
    assert entries(scene, kind) == count + 1
    act()
    assert everything(scene.database) == after


def test_a_lease_whose_answer_is_lost_goes_back_whole(scene: Scene) -> None:
    """The worker does not know whether it has the slice, so it returns it unseen."""
    slice_id = scene._fresh()
    request = LeaseRequest(NAME, slice_id, CAP, CAP)
    with losing_the_answer(scene.database), pytest.raises(StoreAway):
        leases.lease(scene.database, "one", [request], LEASE_S)
    assert scene.balance()["held"] > 0
    for _ in range(2):
        leases.retire(scene.database, [Report(NAME, slice_id, 0, 0)])
    assert scene.balance()["held"] == 0
