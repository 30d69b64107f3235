"""What a group of outcomes is decided by beside balances: what is set, drawn and told already.

Read once, under the lock of the balances; what the group tells by itself is kept here too.
"""

from __future__ import annotations

from base64 import b64encode
from collections.abc import Callable
from typing import Any

from service.ledger.entries import PAYING, Body, Entry
from service.ledger.values import brought
from service.store import bodies, epochs
from service.store.bookings import Booking
from service.store.books import Books
from service.store.database import Writing
from service.store.driver import select_among

FACTS = ("features", "hint", "arm")  # Of an impression, written into all that is said of it.

Slots = dict[str, tuple[str, Body]]
# Law, kind, competing bid, floor and configuration in; what the entry must carry for the learner.
Weigh = Callable[[bytes, str, int | None, int, dict[str, Any]], dict[str, Any]]


def weightless(*_: object) -> dict[str, Any]:
    """Nothing to carry: what a method that draws nothing needs."""
    return {}


class Known:
    """
    The configurations of the line items of a group, and what the stream says of its bids.

    Args:
        books: Of these line items; it is told the service time.
        weigh: Asked only where the bid's snapshot has a law.
    """

    def __init__(
        self, connection: Writing, books: Books, group: list[Booking], weigh: Weigh
    ) -> None:
        self.configs: dict[str, dict[str, Any]] = {}
        self._weigh, self._books = weigh, books
        self._reset_seqs: dict[str, int] = {}
        self._laws: dict[tuple[str, int], bytes] = {}
        self._slots: dict[bytes, Slots] = {}
        self._won_seqs: dict[bytes, int] = {}
        self._paid_ms: dict[bytes, int] = {}
        self._read_terms(connection, group)
        self._read_slots(connection, {b.event.bid for b in group})

    def slots(self, bid: bytes) -> Slots:
        """What is known of a bid; changed by keep() alone."""
        return self._slots.setdefault(bid, {})

    def keep(self, slots: Slots, entry: Entry) -> None:
        """Know an entry of a bid from now on."""
        if entry.slot is not None:
            slots[entry.slot] = (entry.kind, entry.body)
        if entry.kind in PAYING and entry.bid is not None:
            self._paid_ms.setdefault(entry.bid, self._books.service_ms)

    def describe(self, body: dict[str, Any], booking: Booking, kind: str, slots: Slots) -> None:
        """Add what a lesson needs of the bid, and of an impression bought, as it was priced."""
        # Nothing is drawn by the plain rule, whatever the law of the moment was.
        if self._laws and kind in ("won", "lost") and not booking.arm:
            body |= self._weighed(body, booking, kind, slots)
        if booking.arm:
            body["arm"] = booking.arm
        if kind in PAYING:
            if booking.features:
                body["features"] = b64encode(booking.features).decode("ascii")
            if booking.hint is not None:
                body["hint"] = booking.hint

    def dated(self, entry: Entry, slots: Slots, booking: Booking) -> Entry:
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
        if won is not None and won <= self._reset_seqs[booking.line_item]:
            body["before_reset"] = True
        return entry._replace(body=body)

    def _weighed(self, body: Body, booking: Booking, kind: str, slots: Slots) -> Body:
        """What the bid was likely to beat, where bids are drawn from a law."""
        law = self._laws.get((booking.line_item, booking.snapshot))
        if law is None:
            return {}
        price = body["price"] if kind == "won" else body["to_win"]
        config = self.configs[booking.line_item]
        said = self._weigh(law, kind, price, booking.floor, config)
        # A bill may come first, and values on it, when nobody knew by what law it was won.
        if kind == "won" and (before := brought(slots)):
            return {**said, "brought": before}
        return said

    def _read_terms(self, connection: Writing, group: list[Booking]) -> None:
        with_laws = set[str]()
        for name, config, reset_seq, has_laws, now_ms in select_among(
            connection, _TERMS, list(self._books.accounts)
        ):
            self.configs[name] = bodies.parsed(config)
            self._reset_seqs[name] = reset_seq
            self._books.service_ms = now_ms
            if has_laws:
                with_laws.add(name)
        # Of most line items no law was ever kept, and then nobody need look for one.
        if with_laws:
            drawn = {(b.line_item, b.snapshot) for b in group if b.line_item in with_laws}
            self._laws = epochs.laws(connection, drawn)

    def _read_slots(self, connection: Writing, bids: set[bytes]) -> None:
        for bid, seq, service_ms, slot, kind, body in select_among(connection, _OF_BIDS, bids):
            if slot == "result":
                self._won_seqs[bytes(bid)] = seq
            if kind in PAYING:
                self._paid_ms.setdefault(bytes(bid), service_ms)
            self._slots.setdefault(bytes(bid), {})[slot] = (kind, bodies.parsed(body))


_TERMS = (
    "SELECT l.id, l.config, coalesce(n.reset_seq, 0),"
    " EXISTS (SELECT 1 FROM epoch e WHERE e.line_item = l.id), service_clock.now_ms"
    " FROM line_item l CROSS JOIN service_clock LEFT JOIN learner n ON n.line_item = l.id"
    " WHERE l.id IN (?)"
)
_OF_BIDS = "SELECT bid, seq, service_ms, slot, kind, body FROM stream WHERE bid IN (?) ORDER BY seq"
