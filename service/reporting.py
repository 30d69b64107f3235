"""What one report asks of the books: a booking by its ticket, or the receipt that refuses it.

Apart from the story of outcomes, which waits and writes; nothing here does either.
"""

from __future__ import annotations

from datetime import date
from functools import lru_cache
from typing import NamedTuple

from service.guard.ticket import BadTicket, Ticket, TicketKeys, bid_of, ref_of
from service.ledger.entries import PAYING
from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.money import PRICE_NANOS_MAX
from service.store.bookings import NO_SNAPSHOT, Booked, Booking

COST_MAX = 4 * PRICE_NANOS_MAX  # Beyond any bid: a currency or a unit was mistaken.


class Report(NamedTuple):
    """
    One reported outcome; prices in nanos per impression, values in nanos.

    Args:
        currency: Of the prices, where the reporter names it.
        delivered: Impressions that came of the sale, in parts of 10^9, if they were told.
        at_the_bid: The price is not told at all: the most it can be is booked.
    """

    kind: str
    ticket: str | None = None
    ref: str | None = None
    clearing: int | None = None
    to_win: int | None = None
    value: int | None = None
    event_id: str | None = None
    corrects: str | None = None
    why: str | None = None
    at: str | None = None
    currency: str | None = None
    delivered: int | None = None
    at_the_bid: bool = False


class Receipt(NamedTuple):
    """
    What became of one report; `code` says why when it is refused.

    Args:
        foreign: Refused because the line item does not exist for the caller's key.
    """

    ref: str | None
    status: str
    code: str | None = None
    clipped: bool = False
    test: bool = False
    detail: str | None = None
    foreign: bool = False
    line_item: str | None = None  # As far as a ticket or a ref has named it.


class Reader:
    """
    Reads reports by their tickets.

    Args:
        incarnation: Of the database; tickets of another one have no slice here.
    """

    def __init__(self, keys: TicketKeys, incarnation: bytes) -> None:
        self._keys, self._incarnation = keys, incarnation

    def read(self, report: Report, only: frozenset[str] | None = None) -> Booking | Receipt:
        """The booking a report asks for, or the receipt that refuses it."""
        if report.ticket is None:
            return _read_ref(report)
        try:
            ticket = self._keys.verify(report.ticket)
        except BadTicket:
            return Receipt(report.ref, "refused", "bad_ticket")
        if only is not None and ticket.line_item not in only:
            return Receipt(report.ref, "refused", "no_such_line_item", foreign=True)
        if report.ref is not None and report.ref != ticket.ref:
            return Receipt(report.ref, "refused", "ref_of_another_bid", line_item=ticket.line_item)
        if report.currency is not None and report.currency != ticket.scale.currency:
            return Receipt(ticket.ref, "refused", "other_currency", line_item=ticket.line_item)
        pays = report.kind in PAYING
        price = _price(report, ticket) if pays else 0
        if price is None or price > COST_MAX:
            code = "no_price" if price is None else "bad_price"
            return Receipt(ticket.ref, "refused", code, line_item=ticket.line_item)
        # Nothing was held for it, so there is nothing to book and nothing to learn.
        if ticket.test:
            return Receipt(ticket.ref, "recorded", test=True)
        return self._booking(report, ticket, price if pays else None)

    def _booking(self, report: Report, ticket: Ticket, price: int | None) -> Booking:
        if report.kind == "value":
            return Booking(ticket.line_item, _value(report, ticket.bid))
        outcome = Outcome(
            report.kind,
            ticket.bid,
            ticket.counter,
            ticket.price,
            ticket.source,
            price,
            None if report.to_win is None else _to_win(report.to_win, ticket),
            report.why,
            report.at,
            ticket.auction,
        )
        # A slice of a database before its restore may be gone or be another's: the late way.
        here = ticket.incarnation == self._incarnation
        return Booking(
            ticket.line_item,
            outcome,
            ticket.slice if here else None,
            _day(ticket.day),
            # And the same snapshot may have had another law there.
            ticket.snapshot if here else NO_SNAPSHOT,
            ticket.floor,
            ticket.features,
            ticket.hint,
            ticket.arm,
        )


@lru_cache(maxsize=64)
def _day(ordinal: int) -> str:
    """The date of a ticket's day; all tickets of an hour name one or two of them."""
    return date.fromordinal(ordinal).isoformat()


def _price(report: Report, ticket: Ticket) -> int | None:
    """What it cost, fees included; who pays what he bids need not be told."""
    if report.clearing is not None:
        return ticket.fees.gross(ticket.scale.paid(report.clearing, report.delivered))
    bid_is_paid = report.kind == "won" and ticket.auction != "second"
    return ticket.price if bid_is_paid or report.at_the_bid else None


def _to_win(price: int, ticket: Ticket) -> int | None:
    """The least cost that would have won; what no ledger can hold says nothing."""
    cost = ticket.fees.gross(ticket.scale.paid(price))
    return cost if cost <= COST_MAX else None


def _read_ref(report: Report) -> Booking | Receipt:
    """A value may come by ref alone; its line item is looked up after."""
    if report.kind != "value" or report.ref is None:
        return Receipt(report.ref, "refused", "no_ticket")
    try:
        return Booking("", _value(report, bid_of(report.ref)))
    except BadTicket:
        return Receipt(None, "refused", "bad_ref")


def placed(
    row: Booking | Receipt,
    found: dict[bytes, str],
    ref: str | None,
    only: frozenset[str] | None,
) -> Booking | Receipt:
    """A value that came by ref alone with its line item, or the receipt that refuses it."""
    if isinstance(row, Receipt) or row.line_item:
        return row
    known = row.event.bid in found
    # Answered as a ref that nobody has, or a guesser would learn which are taken.
    if not known or (only is not None and found[row.event.bid] not in only):
        return Receipt(ref, "refused", "no_such_ref", foreign=known)
    return Booking(found[row.event.bid], row.event)


def _value(report: Report, bid: bytes) -> Value:
    return Value(bid, report.event_id or "", report.value or 0, report.corrects, report.at)


def receipt(row: Booking, booked: Booked) -> Receipt:
    """What the caller is told of a booking."""
    status, code, clipped = booked
    return Receipt(ref_of(row.event.bid), status, code, clipped, line_item=row.line_item)
