"""One group of outcomes, one durable transaction: lock, read, decide, write."""

from __future__ import annotations

from base64 import b64encode
from collections.abc import Callable, Iterable
from typing import Any, NamedTuple

from sqlalchemy import text

from service.ledger.entries import PAYING, Body, Entry
from service.ledger.runs import Run
from service.ledger.settle import Outcome, Place, settle
from service.ledger.values import Value, brought, judge, unparked
from service.money import nanos_text
from service.store import bodies, epochs
from service.store.books import Books
from service.store.changes import announce
from service.store.database import Database, Reading, Writing
from service.store.driver import select_among
from service.store.freezes import put
from service.store.journal import note

FACTS = ("features", "hint", "arm")  # Of an impression, written into all that is said of it.
NO_SNAPSHOT = -1  # Of a price made before the database was restored.

Slots = dict[str, tuple[str, Body]]


class Booking(NamedTuple):
    """
    One outcome or value with the place its ticket names.

    Args:
        slice_id: None when the ticket is of another incarnation of the database.
        day: The local day its money belongs to.
        snapshot: The learner's state that the price was made from, and so its law, if any.
        floor: Least price the seller took, in nanos per impression.
        features: What was known of the impression, hashed.
        hint: What the caller predicted of its value, in nanos.
        arm: Which rule bid, where there is a control share.
    """

    line_item: str
    event: Outcome | Value
    slice_id: bytes | None = None
    day: str | None = None
    snapshot: int = 0
    floor: int = 0
    features: bytes = b""
    hint: int | None = None
    arm: str = ""


# Law, kind, competing bid, floor and configuration in; what the entry must carry for the learner.
Weigh = Callable[[bytes, str, int | None, int, dict[str, Any]], dict[str, Any]]


def weightless(*_: object) -> dict[str, Any]:
    """Nothing to carry: what a method that draws nothing needs."""
    return {}


class Booked(NamedTuple):
    """What became of one booking."""

    status: str
    code: str | None = None
    clipped: bool = False


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
        self._connection = connection
        self._weigh = weigh
        self._wall_ms = wall_ms
        self._group = group
        self._books = Books(connection, [b.line_item for b in group], wall_ms)
        self._books.load_slices(b.slice_id for b in group if b.slice_id)
        self._books.load_days({(b.line_item, b.day) for b in group if b.day})
        self._configs: dict[str, dict[str, Any]] = {}
        self._laws: dict[tuple[str, int], bytes] = {}
        self._read_terms()
        self._won_seqs: dict[bytes, int] = {}
        self._paid_ms: dict[bytes, int] = {}
        self._slots = self._read_slots({b.event.bid for b in group})
        self._runs: dict[bytes, Run] = {}

    def book(self) -> list[Booked]:
        """Decide every row in order, write once."""
        booked = [self._one(booking) for booking in self._group]
        self._post_runs()
        self._books.save()
        # The change number is taken last: its one row is what every writer waits for.
        self._freeze_unfunded()
        return booked

    def _read_terms(self) -> None:
        """The configurations, and the laws that bids of this group were drawn from, if any."""
        found = select_among(self._connection, _TERMS, list(self._books.accounts))
        rows = [(name, bodies.parsed(config), drawn) for name, config, drawn in found]
        self._configs = {name: config for name, config, _ in rows}
        # Of most line items no law was ever kept, and then nobody need look for one.
        if names := {name for name, _, drawn in rows if drawn}:
            drawn = {(b.line_item, b.snapshot) for b in self._group if b.line_item in names}
            self._laws = epochs.laws(self._connection, drawn)

    def _one(self, booking: Booking) -> Booked:
        # A sound ticket of a line item we do not have: a database restored from before it.
        if booking.line_item not in self._configs:
            return Booked("refused", "no_such_line_item")
        event = booking.event
        if isinstance(event, Value):
            return self._value(booking, event)
        slots = self._slots.setdefault(event.bid, {})
        # Nothing is known of the bid and its hold is there: so it is of nearly all.
        if not slots and event.kind != "billed" and (run := self._run(booking)) is not None:
            return self._first(booking, event, run, slots)
        # All others are decided on balances.
        self._post_runs()
        return self._outcome(booking, event, slots)

    def _first(self, booking: Booking, outcome: Outcome, run: Run, slots: Slots) -> Booked:
        """The first result of a bid whose slice is open."""
        body, cost = run.take(outcome)
        entry = Entry(outcome.kind, body, outcome.bid, "result", cost)
        body |= self._weighed(booking, entry, slots)
        body |= _seen(booking, entry.kind)
        self._append(booking.line_item, slots, entry)
        if entry.kind in PAYING:
            self._paid_ms[outcome.bid] = self._books.service_ms
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
        run = Run(slice_, self._configs[booking.line_item]["spend_on"])
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
                self._configs[booking.line_item]["spend_on"],
            ),
        )
        slice_id = slice_.id if slice_ else None
        entry = verdict.entry
        if entry is not None:
            body = self._told(booking, entry, (slice_id, day), slots)
            entry = Entry(entry.kind, body, entry.bid, entry.slot, entry.cost)
        name, rounds = booking.line_item, verdict.rounds
        self._books.post(name, entry, verdict.movement, day=day, slice_id=slice_id, rounds=rounds)
        self._keep(slots, entry)
        if entry is not None and entry.kind in PAYING:
            self._paid_ms.setdefault(outcome.bid, self._books.service_ms)
            for lesson in unparked(slots, outcome.bid):
                self._append(name, slots, self._dated(lesson, slots, booking))
        return Booked(verdict.status)

    def _value(self, booking: Booking, value: Value) -> Booked:
        slots = self._slots.setdefault(value.bid, {})
        terms = self._configs[booking.line_item]["value"]
        verdict = judge(value, slots, ceiling=terms["ceiling"], arrival=terms["arrival"])
        if verdict.entry is not None:
            self._append(booking.line_item, slots, self._dated(verdict.entry, slots, booking))
        return Booked(verdict.status, verdict.code, verdict.clipped)

    def _dated(self, entry: Entry, slots: Slots, booking: Booking) -> Entry:
        """
        A value with all that a lesson needs of its impression, so that the fold reads one entry.

        That is when it was paid for, what it had brought before, and whether that was before
        the last reset, since then it teaches nothing.
        """
        bid = entry.bid or b""
        if entry.kind != "value" or bid not in self._paid_ms:
            return entry
        body = {**entry.body, "won_ms": self._paid_ms[bid], "total_was": brought(slots)}
        # A bill may come before its win, and proves as much.
        win = (slots.get("result") or slots.get("billed") or ("", {}))[1]
        if "chance" in win:
            body["win"] = {name: win[name] for name in ("price", "chance", "stage")}
        body |= {name: win[name] for name in FACTS if name in win}
        won = self._won_seqs.get(bid)
        if won is not None and won <= self._reset_seq(booking.line_item):
            body["before_reset"] = True
        return entry._replace(body=body)

    def _reset_seq(self, line_item: str) -> int:
        statement = text("SELECT reset_seq FROM learner WHERE line_item = :id")
        return int(self._connection.execute(statement, {"id": line_item}).scalar_one())

    def _append(self, line_item: str, slots: Slots, entry: Entry) -> None:
        self._books.append(line_item, entry)
        self._keep(slots, entry)

    def _told(
        self, booking: Booking, entry: Entry, place: tuple[bytes | None, str | None], slots: Slots
    ) -> Body:
        """The body with all that the stream must hold, so that it can be replayed alone."""
        slice_id, day = place
        return {
            **entry.body,
            "slice": slice_id.hex() if slice_id else None,
            "day": day,
            **self._weighed(booking, entry, slots),
            **_seen(booking, entry.kind),
        }

    def _weighed(self, booking: Booking, entry: Entry, slots: Slots) -> Body:
        """What the bid was likely to beat, where bids are drawn from a law."""
        # The plain rule draws nothing, whatever the law of the moment was.
        if not self._laws or entry.kind not in ("won", "lost") or booking.arm:
            return {}
        law = self._laws.get((booking.line_item, booking.snapshot))
        if law is None:
            return {}
        price = entry.body["price"] if entry.kind == "won" else entry.body["to_win"]
        config = self._configs[booking.line_item]
        said = self._weigh(law, entry.kind, price, booking.floor, config)
        # A bill may come first, and values on it, when nobody knew by what law it was won.
        if entry.kind == "won" and (before := brought(slots)):
            return {**said, "brought": before}
        return said

    def _keep(self, slots: Slots, entry: Entry | None) -> None:
        if entry is not None and entry.slot is not None:
            slots[entry.slot] = (entry.kind, entry.body)

    def _read_slots(self, bids: set[bytes]) -> dict[bytes, Slots]:
        found: dict[bytes, Slots] = {}
        for bid, seq, service_ms, slot, kind, body in select_among(
            self._connection, _OF_BIDS, bids
        ):
            if slot == "result":
                self._won_seqs[bytes(bid)] = seq
            if kind in PAYING:
                self._paid_ms.setdefault(bytes(bid), service_ms)
            found.setdefault(bytes(bid), {})[slot] = (kind, bodies.parsed(body))
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


def _seen(booking: Booking, kind: str) -> Body:
    """The arm of a bid; of an impression bought, what was known when it was priced."""
    seen: dict[str, Any] = {"arm": booking.arm} if booking.arm else {}
    if kind not in PAYING:
        return seen
    if booking.features:
        seen["features"] = b64encode(booking.features).decode("ascii")
    if booking.hint is not None:
        seen["hint"] = booking.hint
    return seen


_RECORDED = Booked("recorded")
_TERMS = (
    "SELECT id, config, EXISTS (SELECT 1 FROM epoch e WHERE e.line_item = line_item.id)"
    " FROM line_item WHERE id IN (?)"
)
_OF_BIDS = "SELECT bid, seq, service_ms, slot, kind, body FROM stream WHERE bid IN (?) ORDER BY seq"
_WINS = "SELECT bid, line_item FROM stream WHERE bid IN (?) AND slot IN ('result', 'billed')"


def _amount(nanos: int, config: dict[str, Any]) -> str:
    return f"{nanos_text(nanos)} {config['currency']}"
