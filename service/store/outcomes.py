"""One group of outcomes, one durable transaction: lock, read, decide, write."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from service.ledger.entries import PAYING, Entry
from service.ledger.runs import Run
from service.ledger.settle import Outcome, Place, settle
from service.ledger.values import Value, judge, unparked
from service.money import nanos_text
from service.store.bookings import Booked, Booking
from service.store.books import Books
from service.store.changes import announce
from service.store.database import Database, Reading, Writing
from service.store.driver import select_among
from service.store.freezes import put
from service.store.journal import note
from service.store.known import Known, Slots, Weigh, weightless


def book(database: Database, group: list[Booking], weigh: Weigh = weightless) -> list[Booked]:
    """
    Book a group in one transaction; when this returns, all of it is durable.

    Args:
        weigh: Pure; asked only where the bid's snapshot has a law.

    Raises:
        StoreAway: Perhaps booked; the same group again answers `duplicate`.
    """
    return database.write(
        lambda connection: _Group(connection, database.wall_ms(), group, weigh).book()
    )


def find_wins(connection: Reading, bids: Iterable[bytes]) -> dict[bytes, str]:
    """The line items of these bids, as far as their win or billing is known."""
    rows = select_among(connection, _WINS, set(bids))
    return {bytes(bid): line_item for bid, line_item in rows}


class _Group:
    """The working set of one transaction."""

    def __init__(
        self, connection: Writing, wall_ms: int, group: list[Booking], weigh: Weigh
    ) -> None:
        self._connection, self._wall_ms, self._group = connection, wall_ms, group
        self._books = Books(connection, [b.line_item for b in group], wall_ms)
        self._books.load_slices(b.slice_id for b in group if b.slice_id)
        self._books.load_days({(b.line_item, b.day) for b in group if b.day})
        self._known = Known(connection, self._books, group, weigh)
        self._runs: dict[bytes, Run] = {}

    def book(self) -> list[Booked]:
        """Decide every row in order, write once."""
        booked = [self._one(booking) for booking in self._group]
        self._post_runs()
        self._books.save()
        # The change number is taken last: its one row is what every writer waits for.
        self._freeze_unfunded()
        return booked

    def _one(self, booking: Booking) -> Booked:
        # A sound ticket of a line item we do not have: a database restored from before it.
        if booking.line_item not in self._known.configs:
            return Booked("refused", "no_such_line_item")
        event = booking.event
        slots = self._known.slots(event.bid)
        if isinstance(event, Value):
            return self._value(booking, event, slots)
        # Nothing is known of the bid and its hold is there: so it is of nearly all.
        if not slots and event.kind != "billed" and (run := self._run(booking)) is not None:
            return self._first(booking, event, run, slots)
        # All others are decided on balances.
        self._post_runs()
        return self._outcome(booking, event, slots)

    def _first(self, booking: Booking, outcome: Outcome, run: Run, slots: Slots) -> Booked:
        """The first result of a bid whose slice is open."""
        body, cost = run.take(outcome)
        self._known.describe(body, booking, outcome.kind, slots)
        entry = Entry(outcome.kind, body, outcome.bid, "result", cost)
        self._append(booking.line_item, slots, entry)
        return _RECORDED

    def _run(self, booking: Booking) -> Run | None:
        """The run of the bid's slice, if the slice is open."""
        if booking.slice_id is None:
            return None
        if (run := self._runs.get(booking.slice_id)) is not None:
            return run
        slice_ = self._books.slices.get(booking.slice_id)
        if slice_ is None or not slice_.alive or slice_.line_item != booking.line_item:
            return None
        run = Run(slice_, self._known.configs[booking.line_item]["spend_on"])
        self._runs[slice_.id] = run
        return run

    def _post_runs(self) -> None:
        """Book what the first results up to here have moved, slice by slice."""
        for run in self._runs.values():
            name, day, slice_id = run.slice.line_item, run.slice.day, run.slice.id
            self._books.post(
                name, None, run.movement, day=day, slice_id=slice_id, rounds=run.rounds
            )
        self._runs = {}

    def _outcome(self, booking: Booking, outcome: Outcome, slots: Slots) -> Booked:
        slice_ = self._books.slices.get(booking.slice_id) if booking.slice_id else None
        day = slice_.day if slice_ else booking.day
        verdict = settle(
            outcome,
            Place(
                self._books.accounts[booking.line_item],
                self._books.days.get((booking.line_item, day)) if day else None,
                slice_,
                slots,
                self._known.configs[booking.line_item]["spend_on"],
            ),
        )
        entry = verdict.entry
        # It was told before, and moved what it had to move then.
        if entry is None:
            return Booked(verdict.status)
        slice_id = slice_.id if slice_ else None
        name, rounds = booking.line_item, verdict.rounds
        self._books.post(name, None, verdict.movement, day=day, slice_id=slice_id, rounds=rounds)
        self._append(name, slots, self._told(booking, entry, (slice_id, day), slots))
        if entry.kind in PAYING:
            for lesson in unparked(slots, outcome.bid):
                self._append(name, slots, self._known.dated(lesson, slots, booking))
        return Booked(verdict.status)

    def _value(self, booking: Booking, value: Value, slots: Slots) -> Booked:
        terms = self._known.configs[booking.line_item]["value"]
        verdict = judge(value, slots, ceiling=terms["ceiling"], arrival=terms["arrival"])
        if verdict.entry is not None:
            entry = self._known.dated(verdict.entry, slots, booking)
            self._append(booking.line_item, slots, entry)
        return Booked(verdict.status, verdict.code, verdict.clipped)

    def _append(self, line_item: str, slots: Slots, entry: Entry) -> None:
        self._books.append(line_item, entry)
        self._known.keep(slots, entry)

    def _told(
        self, booking: Booking, entry: Entry, place: tuple[bytes | None, str | None], slots: Slots
    ) -> Entry:
        """An entry with all that the stream must hold, so that it can be replayed alone."""
        slice_id, day = place
        body = {**entry.body, "slice": slice_id.hex() if slice_id else None, "day": day}
        self._known.describe(body, booking, entry.kind, slots)
        return Entry(entry.kind, body, entry.bid, entry.slot, entry.cost)

    def _freeze_unfunded(self) -> None:
        """A cost that found no free money stops the line item, and says so."""
        configs = self._known.configs
        frozen = [
            name
            for name, account in self._books.accounts.items()
            if self._books.newly_unfunded(name)
            and put(
                self._connection, name, "tripwire", wall_ms=self._wall_ms, actor="bidkeel",
                reason=f"{_amount(account.unfunded, configs[name])} found no free money",
            )
        ]  # fmt: skip
        for name in frozen:
            note(
                self._connection, wall_ms=self._wall_ms, actor="bidkeel", action="freeze",
                line_item=name, reason="unfunded",
                detail={"unfunded_nanos": self._books.accounts[name].unfunded},
            )  # fmt: skip
        if frozen:
            announce(self._connection, "freeze", frozen)


_RECORDED = Booked("recorded")
_WINS = "SELECT bid, line_item FROM stream WHERE bid IN (?) AND slot IN ('result', 'billed')"


def _amount(nanos: int, config: dict[str, Any]) -> str:
    return f"{nanos_text(nanos)} {config['currency']}"
