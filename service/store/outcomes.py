"""One group of outcomes, one durable transaction: lock, read, decide, write."""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

from sqlalchemy import LargeBinary, text

from service.ledger.entries import Entry
from service.ledger.settle import Outcome, Place, settle
from service.ledger.values import Value, judge, unparked
from service.money import nanos_text
from service.store.books import Books
from service.store.changes import announce
from service.store.database import Database, Reading, Writing, among
from service.store.freezes import put
from service.store.journal import note
from service.store.leases import read_configs

Slots = dict[str, tuple[str, dict[str, Any]]]


@dataclass(frozen=True, slots=True)
class Booking:
    """
    One outcome or value with the place its ticket names.

    Args:
        slice_id: None when the ticket is of another incarnation of the database.
        day: The local day its money belongs to.
    """

    line_item: str
    event: Outcome | Value
    slice_id: bytes | None = None
    day: str | None = None


@dataclass(frozen=True, slots=True)
class Booked:
    """What became of one booking."""

    status: str
    code: str | None = None
    clipped: bool = False


def book(database: Database, group: list[Booking]) -> list[Booked]:
    """
    Book a group in one transaction; when this returns, all of it is durable.

    Raises:
        StoreAway: Perhaps booked; the same group again answers `duplicate`.
    """
    return database.write(lambda connection: _Group(connection, database.wall_ms(), group).book())


def find_wins(connection: Reading, bids: Iterable[bytes]) -> dict[bytes, str]:
    """The line items of these bids, as far as their win or billing is known."""
    statement = among(
        "SELECT bid, line_item FROM stream WHERE bid IN :bids AND slot IN ('result', 'billed')",
        "bids",
        LargeBinary,
    )
    rows = connection.execute(statement, {"bids": sorted(set(bids))})
    return {bytes(row.bid): row.line_item for row in rows}


class _Group:
    """The working set of one transaction."""

    def __init__(self, connection: Writing, wall_ms: int, group: list[Booking]) -> None:
        self._connection = connection
        self._wall_ms = wall_ms
        self._group = group
        self._books = Books(connection, [b.line_item for b in group], wall_ms)
        self._books.load_slices(b.slice_id for b in group if b.slice_id)
        self._books.load_days({(b.line_item, b.day) for b in group if b.day})
        self._configs = read_configs(connection, list(self._books.accounts))
        self._won_seqs: dict[bytes, int] = {}
        self._slots = self._read_slots({b.event.bid for b in group})

    def book(self) -> list[Booked]:
        """Decide every row in order, write once."""
        booked = [self._one(booking) for booking in self._group]
        self._books.save()
        # The change number is taken last: its one row is what every writer waits for.
        self._freeze_unfunded()
        return booked

    def _one(self, booking: Booking) -> Booked:
        # A sound ticket of a line item we do not have: a database restored from before it.
        if booking.line_item not in self._configs:
            return Booked("refused", "no_such_line_item")
        if isinstance(booking.event, Value):
            return self._value(booking, booking.event)
        return self._outcome(booking, booking.event)

    def _outcome(self, booking: Booking, outcome: Outcome) -> Booked:
        slots = self._slots.setdefault(outcome.bid, {})
        slice_ = self._books.slices.get(booking.slice_id) if booking.slice_id else None
        day = slice_.day if slice_ else booking.day
        verdict = settle(
            outcome,
            Place(
                self._books.accounts[booking.line_item],
                self._books.days.get((booking.line_item, day)) if day else None,
                slice_,
                slots,
                self._configs[booking.line_item]["spend_on"],
            ),
        )
        if slice_ is not None and verdict.rounds:
            counted = replace(slice_, counted=slice_.counted + verdict.rounds)
            self._books.replace_slice(counted)
        slice_id = slice_.id if slice_ else None
        self._books.post(
            booking.line_item, self._placed(verdict.entry, slice_id, day), verdict.movement,
            day=day, slice_id=slice_id,
        )  # fmt: skip
        self._keep(slots, verdict.entry)
        if verdict.entry is not None and verdict.entry.kind in ("won", "billed"):
            for lesson in unparked(slots, outcome.bid):
                self._append(booking.line_item, slots, lesson)
        return Booked(verdict.status)

    def _value(self, booking: Booking, value: Value) -> Booked:
        slots = self._slots.setdefault(value.bid, {})
        terms = self._configs[booking.line_item]["value"]
        verdict = judge(value, slots, ceiling=terms["ceiling"], arrival=terms["arrival"])
        if verdict.entry is not None:
            self._append(booking.line_item, slots, self._dated(verdict.entry, booking.line_item))
        return Booked(verdict.status, verdict.code, verdict.clipped)

    def _dated(self, entry: Entry, line_item: str) -> Entry:
        """A value of a win from before the last reset says so, and teaches nothing."""
        won = self._won_seqs.get(entry.bid or b"")
        if entry.kind != "value" or won is None or won > self._reset_seq(line_item):
            return entry
        return replace(entry, body={**entry.body, "before_reset": True})

    def _reset_seq(self, line_item: str) -> int:
        statement = text("SELECT reset_seq FROM learner WHERE line_item = :id")
        return int(self._connection.execute(statement, {"id": line_item}).scalar_one())

    def _append(self, line_item: str, slots: Slots, entry: Entry) -> None:
        self._books.post(line_item, entry)
        self._keep(slots, entry)

    def _placed(self, entry: Entry | None, slice_id: bytes | None, day: str | None) -> Entry | None:
        """The entry with its slice and day in it, so that the stream can be replayed alone."""
        if entry is None:
            return None
        place = {"slice": slice_id.hex() if slice_id else None, "day": day}
        return replace(entry, body={**entry.body, **place})

    def _keep(self, slots: Slots, entry: Entry | None) -> None:
        if entry is not None and entry.slot is not None:
            slots[entry.slot] = (entry.kind, dict(entry.body))

    def _read_slots(self, bids: set[bytes]) -> dict[bytes, Slots]:
        statement = among(
            "SELECT bid, seq, slot, kind, body FROM stream WHERE bid IN :ids", of=LargeBinary
        )
        found: dict[bytes, Slots] = {}
        for row in self._connection.execute(statement, {"ids": sorted(bids)}):
            if row.slot == "result":
                self._won_seqs[bytes(row.bid)] = row.seq
            found.setdefault(bytes(row.bid), {})[row.slot] = (row.kind, json.loads(row.body))
        return found

    def _freeze_unfunded(self) -> None:
        """A cost that found no free money stops the line item, and says so."""
        frozen = [
            name
            for name, account in self._books.accounts.items()
            if self._books.newly_unfunded(name)
            and put(
                self._connection, name, "tripwire", wall_ms=self._wall_ms, actor="bidkeel",
                reason=f"{_amount(account.unfunded, self._configs[name])} found no free money",
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


def _amount(nanos: int, config: dict[str, Any]) -> str:
    return f"{nanos_text(nanos)} {config['currency']}"
