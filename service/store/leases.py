"""Slices in the database: leased, retired, ticked and closed; each in one transaction."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import orjson
from sqlalchemy import text

from service.ledger.accounts import NO_LIMIT, Account, Day, Movement, Slice
from service.ledger.days import left_ms, local_day
from service.ledger.entries import Entry
from service.ledger.leasing import Wish, slice_amount
from service.store.books import Books
from service.store.database import Database, Reading, Writing, among
from service.store.freezes import frozen
from service.store.workers import live

# Beyond every clock, and a billing grace on top of it still fits 64 bits.
NEVER_MS = 2**60


@dataclass(frozen=True, slots=True)
class LeaseRequest:
    """A worker's wish for one line item, under a slice id it made itself."""

    line_item: str
    slice_id: bytes
    forecast: int
    before: int


@dataclass(frozen=True, slots=True)
class Leased:
    """
    A slice this worker may use for `lease_ms` from before it asked; amount in nanos.

    Args:
        tail: It holds less than one largest bid, since no more was free.
    """

    line_item: str
    slice_id: bytes
    amount: int
    day: str
    lease_ms: int
    tail: bool = False


@dataclass(frozen=True, slots=True)
class Denied:
    """No money to lease, and the pass that says so."""

    line_item: str
    reason: str


@dataclass(frozen=True, slots=True)
class Report:
    """What a worker has priced from one slice so far: bids issued, passes under the floor."""

    line_item: str
    slice_id: bytes
    bids: int
    under_floor: int
    issued: int = 0


def lease(
    database: Database, worker: str, requests: list[LeaseRequest], lease_s: int
) -> list[Leased | Denied]:
    """Lease for several line items at once; money is held, durably, before this returns."""

    def work(connection: Writing) -> list[Leased | Denied]:
        wall_ms = database.wall_ms()
        books = Books(connection, [r.line_item for r in requests], wall_ms)
        # Read under the lock, so that an edit either is seen here or waits for us.
        configs = read_configs(connection, list(books.accounts))
        lenders = _Lenders(connection, worker, lease_s * 1000, list(books.accounts))
        answers = lenders.frozen(list(books.accounts))
        shut = {answer.line_item for answer in answers}
        zones = {name: config["flight"]["time_zone"] for name, config in configs.items()}
        # Of all at once; what is not there yet is opened one by one.
        books.load_days((name, local_day(wall_ms, zone)) for name, zone in zones.items())
        answers += [
            lenders.lend(books, configs[r.line_item], r, wall_ms)
            for r in requests
            if r.line_item in configs and r.line_item not in shut
        ]
        books.save()
        return answers

    return database.write(work)


class _Lenders:
    """One leasing transaction: who lives, and what the dead still hold."""

    def __init__(
        self, connection: Writing, worker: str, lease_ms: int, line_items: list[str]
    ) -> None:
        self._connection = connection
        self._worker = worker
        self._lease_ms = lease_ms
        # Whoever asks lives, even if its beat is overdue.
        self._live = set(live(connection)) | {worker}
        self._dead = self._orphaned(line_items)

    def frozen(self, line_items: list[str]) -> list[Leased | Denied]:
        """
        The answers for those that are frozen.

        A worker that slept through a freeze must not bid on before it has read of it.
        """
        return [Denied(name, "frozen") for name in sorted(frozen(self._connection, line_items))]

    def lend(
        self, books: Books, config: dict[str, Any], request: LeaseRequest, wall_ms: int
    ) -> Leased | Denied:
        """Hold money for one slice, or say which limit leaves none."""
        account = books.accounts[request.line_item]
        today = local_day(wall_ms, config["flight"]["time_zone"])
        day = books.open_day(account.line_item, today, config["daily_budget"] or NO_LIMIT)
        # Decided on rows that this transaction has locked, so nobody else can lease them too.
        amount = self._amount(account, day, config, request)
        lease_ms = _lease_ms(config, wall_ms, self._lease_ms)
        if amount <= 0 or lease_ms <= 0:
            return Denied(account.line_item, _why_none(account, day))
        fresh = Slice(
            request.slice_id,
            account.line_item,
            self._worker,
            day.day,
            amount,
            amount,
            0,
            0,
            0,
            "open",
        )
        books.new_slice(fresh, _times_ms(config, books.service_ms, lease_ms))
        entry = Entry("lease", {"slice": fresh.id.hex(), "amount": amount, "day": day.day})
        books.post(account.line_item, entry, Movement(held=amount), day=day.day)
        tail = amount < config["bid_cap"]
        return Leased(account.line_item, fresh.id, amount, day.day, lease_ms, tail)

    def _amount(
        self, account: Account, day: Day, config: dict[str, Any], request: LeaseRequest
    ) -> int:
        wish = Wish(config["bid_cap"], request.forecast, request.before)
        orphaned = self._dead.get(account.line_item, 0)
        free = min(account.free, day.free)
        return slice_amount(wish, free, account.budget, len(self._live), orphaned)

    def _orphaned(self, line_items: list[str]) -> dict[str, int]:
        """What slices of dead workers hold of each of these line items, where they hold any."""
        statement = among(
            "SELECT line_item, sum(remaining) FROM slice WHERE line_item IN :ids"
            " AND state = 'open' AND worker NOT IN :live GROUP BY line_item"
        )
        statement = among(statement, "live")
        row = {"ids": line_items, "live": sorted(self._live)}
        return {name: int(held) for name, held in self._connection.execute(statement, row)}


def retire(database: Database, reports: list[Report]) -> None:
    """Free what these slices never issued; doing it twice frees nothing the second time."""

    def work(connection: Writing) -> None:
        books = Books(connection, [r.line_item for r in reports], database.wall_ms())
        books.load_slices(r.slice_id for r in reports)
        for report in reports:
            _retire(books, report)
        books.save()

    database.write(work)


def tick(database: Database, reports: list[Report]) -> None:
    """Report what was priced so far, so that silent bids and passes count as rounds."""

    def work(connection: Writing) -> None:
        books = Books(connection, [r.line_item for r in reports], database.wall_ms())
        books.load_slices(r.slice_id for r in reports)
        for report in reports:
            found = books.slices.get(report.slice_id)
            rounds = _count(books, found, report.bids) if found else 0
            # Unknown to a database restored from before it; the other reports still count.
            known = report.line_item in books.accounts
            if known and (rounds or report.under_floor):
                body = {"rounds": rounds, "under_floor": report.under_floor}
                books.post(report.line_item, Entry("tick", body))
        books.save()

    database.write(work)


def close_due(database: Database) -> int:
    """Close the slices whose grace is over and drop what nobody billed; returns how many."""

    def work(connection: Writing) -> int:
        due = connection.execute(_DUE).all()
        books = Books(connection, {row.line_item for row in due}, database.wall_ms())
        # Read again under the lock: an outcome may have come in between.
        rows = {bytes(row.id): row for row in connection.execute(_DUE)}
        books.load_slices(rows)
        for slice_id, row in rows.items():
            # One that became due only now is not locked; the next turn closes it.
            if row.line_item in books.accounts:
                _close(books, books.slices[slice_id], bool(row.bids), bool(row.bills))
        books.save()
        return len(rows)

    # Most often nothing is due, and on SQLite a write would keep every other writer out.
    if not database.read(lambda connection: connection.execute(_DUE).first()):
        return 0
    return database.write(work)


def read_configs(
    connection: Reading | Writing, line_items: Iterable[str]
) -> dict[str, dict[str, Any]]:
    """The configuration of these line items."""
    statement = among("SELECT id, config FROM line_item WHERE id IN :ids")
    rows = connection.execute(statement, {"ids": list(line_items)})
    return {name: orjson.loads(config) for name, config in rows}


_DUE = text(
    "SELECT s.id, s.line_item,"
    " CASE WHEN s.state <> 'closed' AND s.close_ms <= c.now_ms THEN 1 ELSE 0 END AS bids,"
    " CASE WHEN s.owed > 0 AND s.billing_close_ms <= c.now_ms THEN 1 ELSE 0 END AS bills"
    " FROM slice s, service_clock c"
    " WHERE ((s.state <> 'closed' AND s.close_ms <= c.now_ms)"
    " OR (s.owed > 0 AND s.billing_close_ms <= c.now_ms))"
    # Books that are off are left as they were found until somebody has looked.
    " AND NOT EXISTS (SELECT 1 FROM freezing f WHERE f.line_item = s.line_item"
    " AND f.source = 'audit') LIMIT 500"
)


def _retire(books: Books, report: Report) -> None:
    found = books.slices.get(report.slice_id)
    # Already retired, or closed meanwhile: its money was freed then, and must not be twice.
    if found is None or found.state != "open":
        return
    rounds = _count(books, found, report.bids)
    books.replace_slice(books.slices[found.id]._replace(state="retired"))
    # Not by `remaining`: outcomes that came before have taken their holds out of it.
    freed = found.amount - report.issued
    body = {
        "slice": found.id.hex(),
        "freed": freed,
        "rounds": rounds,
        "under_floor": report.under_floor,
    }
    movement = Movement(held=-freed, remaining=-freed)
    books.post(found.line_item, Entry("retire", body), movement, day=found.day, slice_id=found.id)


def _count(books: Books, found: Slice, bids: int) -> int:
    """Rounds that a report adds: bids it covers that no outcome has counted before."""
    # Outcomes that came before this tick have counted their own rounds.
    rounds = max(0, bids - found.counted)
    changed = found._replace(ticked=max(bids, found.ticked), counted=found.counted + rounds)
    books.replace_slice(changed)
    return rounds


def _close(books: Books, found: Slice, bids: bool, bills: bool) -> None:
    released = found.remaining if bids else 0
    unbilled = found.owed if bills else 0
    if bids:
        books.replace_slice(found._replace(state="closed"))
    body = {"slice": found.id.hex(), "released": released, "unbilled": unbilled}
    movement = Movement(held=-released - unbilled, remaining=-released, owed=-unbilled)
    entry = Entry("close", body)
    books.post(found.line_item, entry, movement, day=found.day, slice_id=found.id)


def _lease_ms(config: dict[str, Any], wall_ms: int, lease_ms: int) -> int:
    """A slice outlives neither its local day nor the flight."""
    flight = config["flight"]
    # Its bids belong to this day's money, so none may leave after midnight.
    lease_ms = min(lease_ms, left_ms(wall_ms, flight["time_zone"]))
    return lease_ms if flight["ends_ms"] is None else min(lease_ms, flight["ends_ms"] - wall_ms)


def _times_ms(config: dict[str, Any], now: int, lease_ms: int) -> dict[str, int]:
    expires = now + lease_ms
    # The silent slices of a strict line item stay open until an operator says so.
    close = NEVER_MS if config["strict"] else expires + config["grace_ms"]
    return {
        "leased_ms": now,
        "expires_ms": expires,
        "close_ms": close,
        "billing_close_ms": close + config["billing_grace_ms"],
    }


def _why_none(account: Account, day: Day) -> str:
    if account.target <= account.spent:
        return "budget_spent"
    if day.target <= day.spent + day.over_spent:
        return "day_spent"
    return "budget_held"
