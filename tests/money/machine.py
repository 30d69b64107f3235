"""Random histories of one line item on a real database, with every promise held at each step."""

from __future__ import annotations

from typing import Any

from hypothesis import strategies as some
from hypothesis.stateful import RuleBasedStateMachine, invariant, precondition, rule
from sqlalchemy import text

from service.errors import Conflict
from service.store.bookings import Booking
from service.store.database import Database, Writing
from tests.money.exchange import KeptWord
from tests.money.scene import (
    ALL,
    BILLING_GRACE_MS,
    CAP,
    GRACE_MS,
    LEASE_MS,
    NAME,
    Bid,
    Scene,
)

TABLES = (
    *("stream", "slice", "local_day", "learner", "checkpoint", "freezing"),
    *("change_log", "worker", "quarantine", "cancelled", "balance", "line_item"),
)
BUDGET = 150
EXCESS = 3  # How far above its bid a price may lie.

workers = some.sampled_from(["one", "two"])
places = some.integers(0, 1000)
kinds = some.sampled_from(["won", "won", "lost", "void", "billed"])
prices = some.integers(0, CAP + EXCESS)
spans_ms = some.sampled_from([1, LEASE_MS - 1, LEASE_MS, GRACE_MS, LEASE_MS + GRACE_MS])


def wipe(database: Database) -> None:
    """Empty a database for the next history."""

    def work(connection: Writing) -> None:
        for table in TABLES:
            connection.execute(text(f"DELETE FROM {table}"))  # noqa: S608
        connection.execute(text("UPDATE service_clock SET now_ms = 0, seen_ms = 0"))

    database.write(work)


class Machine(RuleBasedStateMachine):
    """
    Everything that workers, exchange, operator and time can do to money.

    Args:
        orderly: No contradictions, prices above the bid, delays beyond grace or budget edits,
            so that nothing may ever be unfunded.
    """

    def __init__(self, database: Database, spend_on: str, *, orderly: bool) -> None:
        super().__init__()
        wipe(database)
        self.scene = Scene(database, spend_on, budget=BUDGET)
        self.orderly = orderly
        self.seen: dict[str, int] = {}
        self.groups: list[list[Booking]] = []
        self.word = KeptWord(spend_on, GRACE_MS, BILLING_GRACE_MS)

    @rule(worker=workers, forecast=some.sampled_from([0, ALL]))
    def refresh(self, worker: str, forecast: int) -> None:
        """A new slice; the old one leaves the hand and waits there to be given back."""
        self.scene.lease(worker, forecast)

    @rule(worker=workers, wishes=some.lists(some.integers(1, CAP), min_size=2, max_size=6))
    def trade(self, worker: str, wishes: list[int]) -> None:
        """Some prices leave."""
        self._trade(worker, wishes)

    @rule(worker=workers, what=some.sampled_from(["tick", "retire", "give_back", "crash"]))
    def work(self, worker: str, what: str) -> None:
        """
        A worker reports, puts its slice down, gives back what it put down, or dies.

        Between putting down and giving back outcomes may come; giving back is sent twice.
        """
        if what == "tick":
            self.scene.tick(worker)
        elif what == "retire":
            self.scene.hand(worker).retire_all()
        elif what == "give_back":
            self.scene.give_back(worker, times=2)
        else:
            self.scene.crash(worker)

    @rule(span_ms=spans_ms, close=some.booleans())
    def time_passes(self, span_ms: int, close: bool) -> None:
        """Service time moves on, and upkeep may close what is over."""
        self.scene.pass_ms(span_ms)
        if close:
            self.scene.close()

    @rule()
    def half_a_day_passes(self) -> None:
        """The wall clock moves on, so every other time the local day changes."""
        self.scene.wall_ms += 12 * 3_600_000
        self.scene.pass_ms(LEASE_MS)

    @rule(
        worker=workers,
        wishes=some.lists(some.integers(1, CAP), min_size=3, max_size=8),
        rows=some.lists(some.tuples(kinds, prices), min_size=2, max_size=6),
    )
    def trade_and_outcomes(
        self, worker: str, wishes: list[int], rows: list[tuple[str, int]]
    ) -> None:
        """Some prices leave, and the outcomes of the latest come back as one group."""
        self._trade(worker, wishes)
        newest = len(self.scene.bids)
        self._tell([(newest - 1 - back, *row) for back, row in enumerate(rows[:newest])])

    @rule(rows=some.lists(some.tuples(places, kinds, prices), min_size=1, max_size=4))
    def worst_moment(self, rows: list[tuple[int, str, int]]) -> None:
        """All time passes, all money that came free is leased again, and then outcomes come."""
        self._trade("one", [CAP] * 3)
        self.scene.pass_ms(LEASE_MS + GRACE_MS)
        self.scene.close()
        self.scene.lease_everything()
        self._tell(rows if self.scene.bids else [])

    @rule(rows=some.lists(some.tuples(places, kinds, prices), min_size=2, max_size=6))
    def outcomes(self, rows: list[tuple[int, str, int]]) -> None:
        """A group of outcomes of any bids, in any order and with any content."""
        self._tell(rows if self.scene.bids else [])

    @rule(place=places, told=some.lists(some.tuples(kinds, prices), min_size=2, max_size=4))
    def contradictions(self, place: int, told: list[tuple[str, int]]) -> None:
        """Several outcomes of one bid."""
        self._tell([(place, *row) for row in told] if self.scene.bids else [])

    @precondition(lambda self: self.groups)
    @rule(place=places)
    def repeat(self, place: int) -> None:
        """A whole group once more, as after an answer that was lost: nothing may move."""
        before = self.scene.balance()
        statuses = self.scene.book(*self.groups[place % len(self.groups)])
        after = self.scene.balance()
        if set(statuses) <= {"duplicate", "conflict"} and before == after:
            return
        raise AssertionError(f"a repeat moved money: {statuses}, {before}, {after}")

    @precondition(lambda self: self.scene.bids and not self.orderly)
    @rule(place=places, kind=kinds, price=prices)
    def foreign_outcome(self, place: int, kind: str, price: int) -> None:
        """A ticket from before a restore: its slice is not looked at."""
        self._book([self.scene.told(self._pick(place), kind, price, here=False)])

    @precondition(lambda self: self.scene.bids)
    @rule(place=places, event=some.sampled_from("abc"), amount=some.integers(0, 500))
    def value(self, place: int, event: str, amount: int) -> None:
        """A value moves no money, whatever becomes of it."""
        before = self.scene.balance() | {"seq": 0, "at_ms": 0}
        self.scene.value(self._pick(place), event, amount)
        if self.scene.balance() | {"seq": 0, "at_ms": 0} != before:
            raise AssertionError("a value moved money")

    @rule(amount=some.integers(0, 300), daily=some.booleans())
    def edit(self, amount: int, daily: bool) -> None:
        """The operator names a new budget, or daily budget; below what is spent it is refused."""
        if daily:
            self.scene.edit(daily_budget=amount or None)
        elif not self.orderly:
            self._edit_budget(amount)

    @invariant()
    def every_promise_holds(self) -> None:
        """V1 to V7, the books of the exchange, and V8 when all is in order."""
        balance, before = self.scene.balance(), self.seen
        self.seen = balance
        if balance == before:
            return  # Not one entry more: what is audited is as it was.
        if faults := self.scene.faults():
            raise AssertionError(faults)
        if self.orderly and balance["unfunded"]:
            raise AssertionError(f"V8: {balance['unfunded']} unfunded")

    def teardown(self) -> None:
        """When every grace is over no money is held, whoever crashed."""
        self.scene.pass_ms(LEASE_MS + GRACE_MS + BILLING_GRACE_MS)
        self.scene.close()
        held = self.scene.balance()["held"]
        if held or (faults := self.scene.faults()):
            raise AssertionError(held or faults)

    def _pick(self, place: int) -> Bid:
        return self.scene.bids[place % len(self.scene.bids)]

    def _book(self, group: list[Booking]) -> None:
        if group:
            self.groups.append(group)
            self.scene.book(*group)

    def _trade(self, worker: str, wishes: list[int]) -> None:
        if self.scene.hand(worker).usable(NAME, self.scene.now_ms / 1000) is None:
            self.scene.lease(worker)
        for price in wishes:
            if (bid := self.scene.bid(price, worker)) is not None:
                self.word.given(bid.id, bid.hold, bid.at_ms)

    def _tell(self, rows: list[tuple[int, str, int]]) -> None:
        told = [self._told(*row) for row in rows]
        self._book([booking for booking in told if booking is not None])

    def _edit_budget(self, budget: int) -> None:
        spent = self.scene.balance()["spent"]
        try:
            self.scene.edit(budget=budget)
        except Conflict:
            if budget >= spent:
                raise
        else:
            if budget < spent:
                raise AssertionError("a budget below what is spent was taken")

    def _told(self, place: int, kind: str, price: int) -> Booking | None:
        bid = self._pick(place)
        if self.orderly and not self.word.allows(bid.id, kind, price, self.scene.now_ms):
            return None
        return self.scene.told(bid, kind, price)


def machines(database: Database, spend_on: str, *, orderly: bool) -> Any:
    """What hypothesis calls for each new history."""
    return lambda: Machine(database, spend_on, orderly=orderly)
