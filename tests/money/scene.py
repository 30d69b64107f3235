"""One line item on a real database, with workers, an exchange and a clock that a test moves."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import text

from service.guard.hand import Hand, SliceInHand
from service.guard.ticket import Ticket
from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.store import leases, line_items, outcomes, workers
from service.store.audit import audit
from service.store.bookings import Booked, Booking
from service.store.database import Database, Reading, Writing
from service.store.leases import Leased, LeaseRequest
from tests.builders import NAME as NAME
from tests.builders import begin, line_item
from tests.money.exchange import Exchange

CAP = 10
LEASE_S = 10
LEASE_MS = LEASE_S * 1000
GRACE_MS = 20_000
BILLING_GRACE_MS = 30_000
NOON_MS = int(datetime(2026, 12, 1, 12, tzinfo=UTC).timestamp() * 1000)
PAYING = ("won", "billed")
ALL = 10**12  # A forecast that asks for as much as the rules allow.


@dataclass(frozen=True)
class Bid:
    """One bid that left, with what its ticket would carry and when it left (service time)."""

    id: bytes
    slice: bytes
    counter: int
    hold: int
    day: str
    at_ms: int


class Scene:
    """A line item whose bids cost at most 10 nanos, on its own migrated database."""

    def __init__(self, database: Database, spend_on: str = "won", **changes: Any) -> None:
        self.database, self.spend_on = database, spend_on
        self.wall_ms = NOON_MS  # And now_ms is service time, moved by pass_ms alone.
        self.exchange = Exchange(spend_on)
        self.hands: dict[str, Hand] = {}
        self.before: dict[str, int] = {}
        self.bids: list[Bid] = []
        self._slices = 0
        self._beats: dict[str, int] = {}
        terms = {"budget": 400, "bid_cap": CAP, "grace_ms": GRACE_MS, "spend_on": spend_on}
        terms |= {"billing_grace_ms": BILLING_GRACE_MS, "flight": {"time_zone": "UTC"}}
        self.config = line_item(**{**terms, **changes})
        database.wall_ms = lambda: self.wall_ms
        begin(database, **self.config)
        self.now_ms: int = self.one("SELECT now_ms FROM service_clock")

    def lease(self, worker: str = "one", forecast: int = ALL) -> int:
        """Put a new slice into a worker's hand; returns its amount, 0 when there is none."""
        fresh = self._fresh()
        request = LeaseRequest(NAME, fresh, forecast, self.before.get(worker, 0))
        self._beat(worker)
        leased = leases.lease(self.database, worker, [request], LEASE_S)[0]
        if not isinstance(leased, Leased):
            return 0
        self.before[worker] = leased.amount
        now = self.now_ms / 1000
        day = datetime.fromisoformat(leased.day).toordinal()
        held = SliceInHand(fresh, NAME, leased.amount, day, now, now + leased.lease_ms / 1000)
        self.hand(worker).receive(held)
        return leased.amount

    def lease_everything(self) -> None:
        """Let a worker that nobody hears of again lease whatever is free."""
        self._beat("greedy")
        requests = [LeaseRequest(NAME, self._fresh(), ALL, ALL) for _ in range(25)]
        leases.lease(self.database, "greedy", requests, LEASE_S)

    def _beat(self, worker: str) -> None:
        if self._beats.get(worker) != self.now_ms:
            self.database.write(lambda c: workers.beat(c, worker, 0, self.wall_ms))
            self._beats[worker] = self.now_ms

    def _fresh(self) -> bytes:
        self._slices += 1
        return self._slices.to_bytes(8).ljust(16, b"\0")

    def hand(self, worker: str = "one") -> Hand:
        """The worker's hand."""
        return self.hands.setdefault(worker, Hand())

    def bid(self, price: int = CAP, worker: str = "one") -> Bid | None:
        """Bid from the worker's hand, as far as its money goes; None when it passes."""
        now_ms = self.now_ms
        held = self.hand(worker).usable(NAME, now_ms / 1000)
        price = min(price, held.free) if held is not None else 0
        if held is None or price == 0:
            return None
        counter = held.take(price)
        day = datetime.fromordinal(held.day).date().isoformat()
        ticket = Ticket(NAME, "default", held.id, counter, price, 0, held.day, bytes(8))
        bid = Bid(ticket.bid, held.id, counter, price, day, now_ms)
        self.bids.append(bid)
        return bid

    def placed(self, price: int = CAP, worker: str = "one") -> Bid:
        """A bid that must be possible."""
        bid = self.bid(price, worker)
        if bid is None:
            raise ValueError("the scene has no money in hand")
        return bid

    def told(self, bid: Bid, kind: str, price: int | None = None, *, here: bool = True) -> Booking:
        """The booking of an outcome; a ticket that is not from here has no slice."""
        given: dict[str, Any] = {
            "price" if kind in PAYING else "to_win": price if kind != "void" else None
        }
        outcome = Outcome(kind, bid.id, bid.counter, bid.hold, "default", **given)
        return Booking(NAME, outcome, bid.slice if here else None, bid.day)

    def book(self, *group: Booking) -> list[str]:
        """Report a group and let the exchange take note; returns each status (or code)."""
        booked = outcomes.book(self.database, list(group))
        for booking in group:
            if isinstance(booking.event, Outcome):
                event = booking.event
                self.exchange.hear(event.bid, event.kind, event.price)
        return [_status(one) for one in booked]

    def tell(self, bid: Bid, kind: str, price: int | None = None, *, here: bool = True) -> str:
        """Report one outcome; returns its status."""
        return self.book(self.told(bid, kind, price, here=here))[0]

    def value(self, bid: Bid, event_id: str, amount: int, corrects: str | None = None) -> str:
        """Report a value; returns its status (or code)."""
        return self.book(Booking(NAME, Value(bid.id, event_id, amount, corrects)))[0]

    def give_back(self, worker: str = "one", times: int = 1) -> None:
        """Tell the database what retired slices never issued, perhaps more than once."""
        hand = self.hand(worker)
        given, hand.given = hand.given, []
        reports = [leases.Report(g.line_item, g.id, g.bids, g.under_floor, g.issued) for g in given]
        for _ in range(times):
            leases.retire(self.database, reports)

    def retire(self, worker: str = "one", times: int = 1) -> None:
        """Take the slice out of the hand and give back what is left of it."""
        self.hand(worker).retire_all()
        self.give_back(worker, times)

    def tick(self, worker: str = "one") -> None:
        """Report what was priced so far."""
        held = self.hand(worker).slices.get(NAME)
        if held is not None:
            leases.tick(self.database, [leases.Report(NAME, held.id, held.bids, 0)])

    def crash(self, worker: str = "one") -> None:
        """Lose a hand and everything in it."""
        self.hands.pop(worker, None)
        self.before.pop(worker, None)

    def pass_ms(self, milliseconds: int) -> None:
        """Let service time pass at one stroke."""
        statement = text("UPDATE service_clock SET now_ms = now_ms + :ms")
        self.database.write(lambda c: c.execute(statement, {"ms": milliseconds}))
        self.now_ms += milliseconds

    def close(self) -> int:
        """Close what is due; returns how many slices."""
        return leases.close_due(self.database)

    def edit(self, **changes: Any) -> None:
        """Store a changed configuration, as an operator would."""
        changed = {**self.config, **changes}

        def work(connection: Writing) -> None:
            version = line_items.one(connection, NAME).version
            line_items.change(connection, changed, version, self.wall_ms)

        self.database.write(work)
        self.config = changed

    def one(self, statement: str, **values: Any) -> Any:
        """The first column of the one row that a statement reads."""
        return self.database.read(lambda c: c.execute(text(statement), values).scalar_one())

    def balance(self) -> dict[str, int]:
        """The balance of the line item."""
        return self.database.read(_balance)

    def day(self) -> dict[str, int]:
        """The row of today."""
        statement = text("SELECT * FROM local_day WHERE day = :day")
        today = datetime.fromtimestamp(self.wall_ms / 1000, UTC).date().isoformat()
        row = self.database.read(lambda c: c.execute(statement, {"day": today}).one())
        return dict(row._mapping)

    def faults(self) -> list[str]:
        """What the audit finds, and where the books of the exchange differ from ours."""
        found, ours = self.database.read(lambda c: (audit(c), _balance(c)))
        faults = [f"{finding.check}: off by {finding.off}" for finding in found]
        cost = ours["spent"] + ours["unfunded"] + ours["disputed"]
        if cost != self.exchange.charged:
            faults.append(f"exchange: it charged {self.exchange.charged}, we booked {cost}")
        return faults


def _balance(connection: Reading) -> dict[str, int]:
    row = connection.execute(text("SELECT * FROM balance")).one()
    return {name: value for name, value in row._mapping.items() if name != "line_item"}


def _status(booked: Booked) -> str:
    return booked.code or booked.status
