"""Working copies of the money rows that one transaction has locked, written back by adding.

Pure ledger code decides on the copies; the guarded updates here are the net beneath it.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import cached_property
from typing import Any

from sqlalchemy import text

from service.errors import BrokenPromise
from service.ledger.accounts import NOTHING, Account, Day, Movement, Slice
from service.ledger.entries import Entry
from service.store import bodies
from service.store.clock import now_ms
from service.store.database import Writing, among
from service.store.driver import Insert, select_among, update_many


class Books:
    """
    The balances of some line items, locked in sorted order, with their days and slices.

    Args:
        connection: A transaction that has touched neither money nor the stream yet.
        wall_ms: The wall clock, for the stamps of entries.
    """

    def __init__(self, connection: Writing, line_items: Iterable[str], wall_ms: int) -> None:
        self._connection = connection
        self._wall_ms = wall_ms
        # The lock comes first in every such transaction; taking it later deadlocked in trials.
        self.accounts = self._lock(sorted(set(line_items)))
        self.days: dict[tuple[str, str], Day] = {}
        self.slices: dict[bytes, Slice] = {}
        self._accounts_before = dict(self.accounts)
        self._days_before: dict[tuple[str, str], Day] = {}
        self._slices_before: dict[bytes, Slice] = {}
        self._days_sought: set[tuple[str, str]] = set()
        self._new_days: list[dict[str, Any]] = []
        self._new_slices: list[dict[str, Any]] = []
        self._rows: list[tuple[Any, ...]] = []
        self._seqs: dict[str, int] = {}

    @cached_property
    def service_ms(self) -> int:
        """Service time, which stamps entries; read when it is asked for, unless it was told."""
        # After the lock, or a waiter would stamp an older moment than its forerunner.
        return now_ms(self._connection)

    def load_slices(self, ids: Iterable[bytes]) -> None:
        """Read these slices and the days they belong to."""
        for row in select_among(self._connection, _SELECT_SLICES, set(ids)):
            self._keep_slice(Slice(bytes(row[0]), *row[1:_SLICE_COLUMNS]))
            line_item, day, sums = row[1], row[3], row[_SLICE_COLUMNS:]
            # Many slices share a day, and one that this transaction has moved already stays.
            if sums[0] is not None and (line_item, day) not in self.days:
                self._keep_day(Day(line_item, day, *sums))

    def load_days(self, wanted: Iterable[tuple[str, str]]) -> None:
        """Read these days where they exist."""
        # What was looked for and is not there is not looked for again.
        missing = set(wanted) - self._days_sought
        if not missing:
            return
        self._days_sought |= missing
        names, days = zip(*missing, strict=True)
        row = {"ids": sorted(set(names)), "days": sorted(set(days))}
        for found in self._connection.execute(_SELECT_DAYS, row):
            # All line items are asked for all days; few of them have a day that is another's.
            if (found.line_item, found.day) in missing:
                self._keep_day(Day(*found))

    def open_day(self, line_item: str, day: str, budget: int) -> Day:
        """The day's row, made with this budget when it is the first use of the day."""
        self.load_days([(line_item, day)])
        if (line_item, day) not in self.days:
            fresh = Day(line_item, day, budget, budget, 0, 0, 0)
            # The balance is locked, so nobody else can make the same day at this moment.
            self._new_days.append({"line_item": line_item, "day": day, "budget": budget})
            self._keep_day(fresh)
        return self.days[line_item, day]

    def new_slice(self, fresh: Slice, times_ms: dict[str, int]) -> None:
        """Insert a slice; its money is counted as held by the movement posted with it."""
        self._new_slices.append(fresh._asdict() | times_ms)
        self._keep_slice(fresh)

    def post(
        self,
        line_item: str,
        entry: Entry | None,
        movement: Movement = NOTHING,
        *,
        day: str | None = None,
        slice_id: bytes | None = None,
        rounds: int = 0,
    ) -> None:
        """
        Apply a movement to the working copies and append the entry behind it.

        Args:
            rounds: Of the slice, newly counted.
        """
        if movement is not NOTHING or rounds:
            self.accounts[line_item] = self.accounts[line_item].moved(movement)
            if day is not None and (line_item, day) in self.days:
                self.days[line_item, day] = self.days[line_item, day].moved(movement)
            if slice_id is not None and slice_id in self.slices:
                self.slices[slice_id] = self.slices[slice_id].moved(movement, rounds)
        if entry is not None:
            self.append(line_item, entry)

    def append(self, line_item: str, entry: Entry) -> None:
        """Append an entry that moves nothing by itself; its seq shows in the balance once saved."""
        account = self.accounts[line_item]
        seq = self._seqs[line_item] = self._seqs.get(line_item, account.seq) + 1
        at_ms, service_ms = max(account.at_ms, self._wall_ms), self.service_ms
        kind, body, bid, slot, cost = entry
        text = bodies.written(body)
        self._rows.append((line_item, seq, kind, at_ms, service_ms, bid, slot, cost, text))

    def replace_slice(self, changed: Slice) -> None:
        """Set what is not money: state, ticked and counted."""
        self.slices[changed.id] = changed

    def replace_account(self, changed: Account) -> None:
        """Set a balance after a budget edit."""
        self.accounts[changed.line_item] = changed

    def replace_day(self, changed: Day) -> None:
        """Set a day after an edit of the daily budget."""
        self.days[changed.line_item, changed.day] = changed

    def newly_unfunded(self, line_item: str) -> bool:
        """Whether this transaction booked cost that found no free money."""
        before = self._accounts_before[line_item]
        return self.accounts[line_item].unfunded > before.unfunded

    def save(self) -> None:
        """
        Write everything back.

        Raises:
            BrokenPromise: A guard said no although the rules had allowed it.
        """
        if self._new_days:
            self._connection.execute(_INSERT_DAY, self._new_days)
        if self._new_slices:
            self._connection.execute(_INSERT_SLICE, self._new_slices)
        for name, seq in self._seqs.items():
            account = self.accounts[name]
            # The wall clock may step back, but the stamps of a stream never do.
            at_ms = max(account.at_ms, self._wall_ms)
            self.accounts[name] = account._replace(seq=seq, at_ms=at_ms)
        accounts = [(self._accounts_before[name], row) for name, row in self.accounts.items()]
        self._write(_UPDATE_BALANCE, "balance", accounts, _BALANCE_SUMS)
        days = [(self._days_before[key], row) for key, row in self.days.items()]
        self._write(_UPDATE_DAY, "day", days, _DAY_SUMS)
        slices = [(self._slices_before[key], row) for key, row in self.slices.items()]
        self._write(_UPDATE_SLICE, "slice", slices, _SLICE_SUMS)
        _ENTRIES.run(self._connection, self._rows)

    def _lock(self, line_items: list[str]) -> dict[str, Account]:
        rows = select_among(self._connection, _SELECT_BALANCES, line_items, lock=True)
        return {row.line_item: Account(*row) for row in rows}

    def _keep_slice(self, found: Slice) -> None:
        self.slices[found.id] = self._slices_before[found.id] = found

    def _keep_day(self, found: Day) -> None:
        key = (found.line_item, found.day)
        self.days[key] = self._days_before[key] = found

    def _write(
        self,
        statement: str,
        what: str,
        pairs: Iterable[tuple[Any, Any]],
        sums: tuple[str, ...],
    ) -> None:
        """Write what has changed of one kind, all rows at once: a group may touch hundreds."""
        rows = [_differences(before, after, sums) for before, after in pairs if before != after]
        # Reached only when the rules and the guard disagree, so it must never pass in silence.
        if rows and update_many(self._connection, statement, rows) != len(rows):
            raise BrokenPromise(f"the guard of a {what} refused a write")


_BALANCE_SUMS = ("spent", "held", "unfunded", "disputed", "seq")
_DAY_SUMS = ("spent", "held", "over_spent")
_SLICE_SUMS = ("remaining", "owed")


def _differences(before: Any, after: Any, sums: tuple[str, ...]) -> dict[str, Any]:
    """The row to write: sums as what to add, everything else as it is now; and what state was."""
    row: dict[str, Any] = after._asdict()
    row |= {name: row[name] - getattr(before, name) for name in sums}
    return row | {"was": getattr(before, "state", None)}


_SELECT_BALANCES = (
    "SELECT line_item, budget, target, spent, held, unfunded, disputed, seq, at_ms"
    " FROM balance WHERE line_item IN (?) ORDER BY line_item"
)
# With the day of each, so that nobody has to ask again.
_SELECT_SLICES = (
    "SELECT s.id, s.line_item, s.worker, s.day, s.amount, s.remaining, s.owed, s.ticked, s.counted,"
    " s.state, d.budget, d.target, d.spent, d.held, d.over_spent FROM slice s"
    " LEFT JOIN local_day d ON d.line_item = s.line_item AND d.day = s.day WHERE s.id IN (?)"
)
_SLICE_COLUMNS = len(Slice._fields)
_SELECT_DAYS = among(
    among(
        "SELECT line_item, day, budget, target, spent, held, over_spent FROM local_day"
        " WHERE line_item IN :ids AND day IN :days"
    ),
    "days",
)
_INSERT_SLICE = text(
    "INSERT INTO slice (id, line_item, worker, day, amount, remaining, owed, ticked, counted,"
    " state, leased_ms, expires_ms, close_ms, billing_close_ms) VALUES (:id, :line_item, :worker,"
    " :day, :amount, :remaining, :owed, :ticked, :counted, :state, :leased_ms, :expires_ms,"
    " :close_ms, :billing_close_ms)"
)
_INSERT_DAY = text(
    "INSERT INTO local_day (line_item, day, budget, target, spent, held, over_spent)"
    " VALUES (:line_item, :day, :budget, :budget, 0, 0, 0)"
)
_UPDATE_BALANCE = (
    "UPDATE balance SET budget = :budget, target = :target, spent = spent + :spent,"
    " held = held + :held, unfunded = unfunded + :unfunded, disputed = disputed + :disputed,"
    " seq = seq + :seq, at_ms = :at_ms"
    " WHERE line_item = :line_item AND spent + :spent + held + :held <= :budget"
)
_UPDATE_DAY = (
    "UPDATE local_day SET budget = :budget, target = :target, spent = spent + :spent,"
    " held = held + :held, over_spent = over_spent + :over_spent"
    " WHERE line_item = :line_item AND day = :day AND spent + :spent + held + :held <= :budget"
)
_UPDATE_SLICE = (
    "UPDATE slice SET remaining = remaining + :remaining, owed = owed + :owed,"
    " ticked = :ticked, counted = :counted, state = :state"
    " WHERE id = :id AND state = :was AND remaining + :remaining >= 0 AND owed + :owed >= 0"
)
_ENTRIES = Insert(
    "stream",
    line_item="TEXT",
    seq="BIGINT",
    kind="TEXT",
    at_ms="BIGINT",
    service_ms="BIGINT",
    bid="BYTES",
    slot="TEXT",
    cost="BIGINT",
    body="TEXT",
)
