"""Slices as rows: how large they are, when they end, and what comes free when they do."""

from __future__ import annotations

import json
from collections.abc import Iterator
from datetime import UTC, datetime
from typing import Any

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise
from service.ledger.settle import Outcome
from service.store import leases, workers
from service.store.audit import audit
from service.store.bookings import Booking
from service.store.database import Database, Writing
from service.store.leases import Denied, Leased, LeaseRequest, Report
from service.store.outcomes import book
from tests.builders import NAME, begin, pass_service_ms

CAP = 10
ALL = 10**12  # A forecast that asks for as much as the rules allow.
LEASE_S = 30
NOON_MS = int(datetime(2026, 12, 1, 12, tzinfo=UTC).timestamp() * 1000)
LEASE_MS, GRACE_MS, BILLING_GRACE_MS = 30_000, 20_000, 40_000
TERMS: dict[str, Any] = {"bid_cap": CAP, "grace_ms": GRACE_MS, "budget": 1000}
TERMS |= {"billing_grace_ms": BILLING_GRACE_MS, "spend_on": "billed"}


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url, wall_ms=lambda: NOON_MS)
    yield database
    assert database.read(audit) == []
    database.close()


def start(database: Database, **terms: Any) -> None:
    """A line item whose bids cost at most 10 nanos."""
    begin(database, **{**TERMS, **terms})


def ask(
    database: Database, mark: int, *, worker: str = "w", forecast: int = ALL, before: int = 0
) -> Leased | Denied:
    """Ask for one slice, whose id is this mark sixteen times."""
    request = LeaseRequest(NAME, bytes([mark]) * 16, forecast, before)
    return leases.lease(database, worker, [request], LEASE_S)[0]


def amount(answer: Leased | Denied) -> int:
    """What was leased."""
    return answer.amount if isinstance(answer, Leased) else 0


def report(mark: int, issued: int = 0, bids: int = 0, under_floor: int = 0) -> Report:
    """What a worker says of that slice."""
    return Report(NAME, bytes([mark]) * 16, bids, under_floor, issued)


def row(database: Database, statement: str) -> tuple[Any, ...]:
    """The one row that a statement reads."""
    return tuple(database.read(lambda c: c.execute(text(statement)).one()))


def told(database: Database, kind: str) -> list[dict[str, Any]]:
    """The bodies of the entries of a kind, in order."""
    statement = text("SELECT body FROM stream WHERE kind = :kind ORDER BY seq")
    bodies = database.read(lambda c: c.execute(statement, {"kind": kind}).scalars().all())
    return [json.loads(body) for body in bodies]


def held(database: Database) -> int:
    """What is held of the balance."""
    return int(row(database, "SELECT held FROM balance")[0])


def won(mark: int, counter: int, hold: int, price: int) -> Booking:
    """A win of the bid in this place of that slice."""
    bid = (int.from_bytes(bytes([mark]) * 16) + counter).to_bytes(16)
    outcome = Outcome("won", bid, counter, hold, "default", price)
    return Booking(NAME, outcome, bytes([mark]) * 16)


def test_a_lease_is_held_before_it_is_told(database: Database) -> None:
    """Balance, day, slice and stream all know of it, with the times it will end at."""
    start(database, daily_budget=600)
    pass_service_ms(database, 700)
    slice_id, day = b"\1" * 16, "2026-12-01"
    assert ask(database, 1) == Leased(NAME, slice_id, 150, day, LEASE_MS)

    assert row(database, "SELECT spent, held FROM balance") == (0, 150)
    assert row(database, "SELECT day, budget, held FROM local_day") == (day, 600, 150)
    ours = "SELECT worker, state, amount, remaining, owed, ticked, counted FROM slice"
    assert row(database, ours) == ("w", "open", 150, 150, 0, 0, 0)
    times = "SELECT leased_ms, expires_ms, close_ms, billing_close_ms FROM slice"
    assert row(database, times) == (700, 30_700, 50_700, 90_700)
    assert told(database, "lease") == [{"slice": slice_id.hex(), "amount": 150, "day": day}]


def test_slices_begin_small_and_grow(database: Database) -> None:
    """The first is at most sixteen largest bids, each next at most double."""
    start(database, budget=100_000)
    amounts = [0]
    for mark in range(1, 6):
        amounts.append(amount(ask(database, mark, before=amounts[-1])))
    assert amounts[1:] == [160, 320, 640, 1280, 2560]


@pytest.mark.parametrize(
    ("budget", "forecast", "live", "leased"),
    [
        (100_000, 70, 1, 70),
        (100_000, 3, 1, 10),
        (400, ALL, 1, 100),
        (400, ALL, 5, 20),
        (400, ALL, 50, 10),
        (7, ALL, 1, 7),
    ],
)
def test_a_slice_is_what_is_needed_within_a_share(
    database: Database, budget: int, forecast: int, live: int, leased: int
) -> None:
    """A quarter of what is free over all who live, at least one largest bid, or the last rest."""
    start(database, budget=budget)
    for number in range(1, live):
        database.write(lambda c, n=number: workers.beat(c, f"other {n}", 0, 1))  # type: ignore[misc]
    assert amount(ask(database, 1, forecast=forecast)) == leased


def test_the_day_bounds_a_slice_as_the_budget_does(database: Database) -> None:
    """What the day has left is what a quarter is taken of."""
    start(database, budget=100_000, daily_budget=100)
    assert [amount(ask(database, mark)) for mark in range(1, 5)] == [25, 18, 14, 10]


@pytest.mark.parametrize(("budget", "leased"), [(3200, 160), (3199, 10)])
def test_a_twentieth_in_dead_hands_leaves_one_bid_at_a_time(
    database: Database, budget: int, leased: int
) -> None:
    """Just a twentieth is borne; beyond it every start would strand another slice."""
    start(database, budget=budget)
    assert amount(ask(database, 1, worker="dead")) == 160
    assert amount(ask(database, 2)) == leased


def test_slices_of_the_living_or_given_back_are_no_orphans(database: Database) -> None:
    """A worker that beats is not dead, and what it gave back is in nobody's hands."""
    start(database, budget=2000)
    database.write(lambda connection: workers.beat(connection, "other", 0, 1))
    ask(database, 1, worker="other")
    assert amount(ask(database, 2)) == 160
    pass_service_ms(database, workers.LIVE_MS)
    assert amount(ask(database, 3)) == 10
    leases.retire(database, [report(1)])
    assert amount(ask(database, 4)) == 160


@pytest.mark.parametrize(
    ("spent", "day_spent", "over", "reason"),
    [
        (100, 40, 0, "budget_spent"),
        (60, 50, 0, "day_spent"),
        (60, 30, 20, "day_spent"),
        (60, 40, 0, "budget_held"),
    ],
)
def test_without_money_nothing_is_leased(
    migrated_url: str, spent: int, day_spent: int, over: int, reason: str
) -> None:
    """The answer names the limit that is reached, and nothing is held."""
    database = Database(migrated_url, wall_ms=lambda: NOON_MS)
    start(database, budget=100, daily_budget=50)
    held_ = 0 if reason != "budget_held" else 10
    values = {"spent": spent, "held": held_, "day": day_spent, "over": over}

    def work(connection: Writing) -> None:
        connection.execute(text("UPDATE balance SET spent = :spent, held = :held"), values)
        day = "INSERT INTO local_day VALUES ('garden', '2026-12-01', 50, 50, :day, :held, :over)"
        connection.execute(text(day), values)

    database.write(work)
    assert ask(database, 1) == Denied(NAME, reason)
    assert row(database, "SELECT count(*) FROM slice") == (0,)
    assert held(database) == held_
    database.close()


def test_several_line_items_lease_in_one_transaction(database: Database) -> None:
    """Each known one has an answer, in the order of the wishes; an unknown one has none."""
    for name in ("orchard", NAME):
        start(database, id=name)
    names = ("orchard", "nobody", NAME)
    wishes = [LeaseRequest(name, name.encode().ljust(16), ALL, 0) for name in names]
    answers = leases.lease(database, "w", wishes, LEASE_S)
    assert [answer.line_item for answer in answers] == ["orchard", NAME]
    assert row(database, "SELECT count(*), min(remaining) FROM slice") == (2, 160)


def test_an_id_that_is_taken_holds_nothing_twice(database: Database) -> None:
    """A slice is never extended, not even by its own id."""
    start(database)
    ask(database, 1)
    with pytest.raises(BrokenPromise):
        ask(database, 1)
    assert held(database) == 160


@pytest.mark.parametrize(
    ("flight", "wall_ms", "lease_ms"),
    [
        ({"ends_ms": NOON_MS + 5000}, NOON_MS, 5000),
        ({"ends_ms": NOON_MS + 50_000}, NOON_MS, LEASE_MS),
        ({"ends_ms": NOON_MS}, NOON_MS, None),
        ({"time_zone": "UTC"}, NOON_MS + 43_197_000, 3000),
        ({"time_zone": "Europe/Zurich"}, NOON_MS + 39_597_000, 3000),
    ],
)
def test_a_slice_outlives_neither_day_nor_flight(
    database: Database, flight: dict[str, Any], wall_ms: int, lease_ms: int | None
) -> None:
    """Its time is cut to whichever is over first; when that is now there is no slice."""
    database.wall_ms = lambda: wall_ms
    start(database, flight=flight)
    answer = ask(database, 1)
    assert (answer.lease_ms if isinstance(answer, Leased) else None) == lease_ms
    assert (held(database) > 0) is (lease_ms is not None)


def test_retiring_frees_what_was_never_issued(database: Database) -> None:
    """Twice in one call, again later, or of a slice nobody knows: it comes free once."""
    start(database, daily_budget=900)
    ask(database, 1)
    for reports in ([report(1, 40, 5)] * 2, [report(1, 0, 0)], [report(9, 0, 0)]):
        leases.retire(database, reports)
    assert row(database, "SELECT state, remaining FROM slice") == ("retired", 40)
    assert (held(database), row(database, "SELECT held FROM local_day")) == (40, (40,))
    gone = {"slice": "01" * 16, "freed": 120, "rounds": 5, "under_floor": 0}
    assert told(database, "retire") == [gone]


def test_a_closed_slice_is_not_retired(database: Database) -> None:
    """A worker that comes back after its grace finds its money freed already."""
    start(database)
    ask(database, 1)
    pass_service_ms(database, LEASE_MS + GRACE_MS)
    assert leases.close_due(database) == 1
    leases.retire(database, [report(1, 40, 5)])
    assert row(database, "SELECT state, remaining FROM slice") == ("closed", 0)
    assert told(database, "retire") == []


def test_a_bid_is_a_round_once(database: Database) -> None:
    """Whether its outcome, a tick or the retiring of its slice comes first."""
    start(database)
    ask(database, 1)
    book(database, [won(1, 3, 10, 7)])
    leases.tick(database, [report(1, bids=5)])
    leases.tick(database, [report(1, bids=5)])
    book(database, [won(1, 4, 10, 7), won(1, 5, 10, 7)])
    leases.retire(database, [report(1, 70, 7)])

    assert [body["rounds"] for body in told(database, "tick")] == [4]
    assert [body["round"] for body in told(database, "won")] == [1, 0, 1]
    assert [body["rounds"] for body in told(database, "retire")] == [1]
    assert row(database, "SELECT ticked, counted FROM slice") == (7, 7)


def test_passes_under_the_floor_are_told_without_a_bid(database: Database) -> None:
    """They are rounds that lost, even when the slice is known no more."""
    start(database)
    leases.tick(database, [report(9, bids=3, under_floor=2), report(9)])
    assert told(database, "tick") == [{"rounds": 0, "under_floor": 2}]


def test_a_tick_of_an_unknown_line_item_spoils_no_other(database: Database) -> None:
    """A database restored from before a line item was made does not know it; others count."""
    start(database)
    ask(database, 1)
    leases.tick(database, [Report("nobody", b"n" * 16, 3, 2), report(1, bids=3)])
    assert told(database, "tick") == [{"rounds": 3, "under_floor": 0}]


def test_slices_close_each_at_its_own_moment(database: Database) -> None:
    """Open and retired alike; what was silent comes free, and closing again closes nothing."""
    start(database, daily_budget=900)
    ask(database, 1)
    leases.retire(database, [report(1, 40, 5)])
    pass_service_ms(database, 1000)
    ask(database, 2)
    pass_service_ms(database, LEASE_MS + GRACE_MS - 1001)
    seen = []
    for span_ms in (0, 1, 999, 1):
        pass_service_ms(database, span_ms)
        seen.append((leases.close_due(database), held(database)))
    assert seen == [(0, 200), (1, 160), (0, 160), (1, 0)]
    assert [body["released"] for body in told(database, "close")] == [40, 160]
    assert leases.close_due(database) == 0
    assert row(database, "SELECT held FROM local_day") == (0,)


def test_slices_of_all_line_items_close_together(database: Database) -> None:
    """One call closes whatever is due, and each balance gets its own back."""
    for name in ("orchard", NAME):
        start(database, id=name)
        leases.lease(database, "w", [LeaseRequest(name, name.encode().ljust(16), ALL, 0)], LEASE_S)
    pass_service_ms(database, LEASE_MS + GRACE_MS)
    assert leases.close_due(database) == 2
    assert row(database, "SELECT sum(held), min(seq) FROM balance") == (0, 3)


@pytest.mark.parametrize("at_once", [False, True])
def test_what_nobody_billed_is_dropped_after_billing_grace(
    database: Database, at_once: bool
) -> None:
    """In a second closing, or in the one that comes after a long time away."""
    start(database)
    ask(database, 1)
    book(database, [won(1, 0, 10, 7)])
    leases.retire(database, [report(1, 30, 3)])
    pass_service_ms(database, LEASE_MS + GRACE_MS)
    if not at_once:
        assert (leases.close_due(database), held(database)) == (1, 7)
    pass_service_ms(database, BILLING_GRACE_MS - 1)
    assert (leases.close_due(database), held(database)) == (int(at_once), 7)
    pass_service_ms(database, 1)
    assert (leases.close_due(database), held(database)) == (1, 0)
    dropped = [(body["released"], body["unbilled"]) for body in told(database, "close")]
    assert dropped == [(20, 0), (0, 7)]


def test_a_strict_line_item_closes_nothing_by_itself(database: Database) -> None:
    """However long it is silent, its money waits for an operator."""
    start(database, strict=True)
    ask(database, 1)
    pass_service_ms(database, 10**12)
    assert (leases.close_due(database), held(database)) == (0, 160)
    assert row(database, "SELECT close_ms FROM slice") == (leases.NEVER_MS,)


def test_configurations_are_read_as_they_were_stored(database: Database) -> None:
    """Of those that exist; the others are left out."""
    start(database, name="Another garden")
    found = database.read(lambda c: leases.read_configs(c, [NAME, "nobody"]))
    assert list(found) == [NAME]
    assert found[NAME]["name"] == "Another garden"
