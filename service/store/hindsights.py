"""The decision log joined with what came of each bid, page by page, apart from what is made of it.

A page is a short read of its own, so that hours of log hold no connection and no old view of the
database. A bid of the log is found in the stream by its ref; what was decided and never logged,
as after a crash, is not here.
"""

from __future__ import annotations

import json
from base64 import urlsafe_b64decode
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import LargeBinary, text

from service.ledger.cancelling import MARKET, VALUE, Cancelled
from service.ledger.days import local_day
from service.ledger.entries import PAYING
from service.store.clock import now_ms
from service.store.database import Reading, among
from service.store.lessons import cancellations

PAGE_ROWS = 1000
ORDER_SLACK_MS = 60_000  # Workers log in batches, so lines stand a little out of order.
RECENT = 2000
RETRACTED, LATE, CONTRADICTED = NOTES = ("retracted", "late_values", "contradicted")


@dataclass(frozen=True, slots=True)
class Said:
    """
    What the stream says of one bid.

    Args:
        result: "won", "lost", "void" or "silent".
        body: Of its result.
        price: What was paid.
        amount: What it has brought, as far as it counts.
        valued: Whether any value has come.
        paid_ms: Service time at which it was paid for; None where it was not.
        notes: What is to be counted of it, by names of `NOTES`.
    """

    result: str = "silent"
    body: Mapping[str, Any] = field(default_factory=dict)
    price: int = 0
    amount: int = 0
    valued: bool = False
    paid_ms: int | None = None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Line:
    """One decision, the local day it was made on, and what is said of it if it was a bid."""

    decision: Mapping[str, Any]
    day: str
    said: Said


@dataclass(frozen=True, slots=True)
class Page:
    """
    Some decisions in order.

    Args:
        lines: Those of the span, without test bids.
        tests: How many test bids were left out.
        end: The number of the last one read; None when there are no more.
        service_ms: Service time at which it was read.
    """

    lines: list[Line]
    tests: int
    end: int | None
    service_ms: int


@dataclass(frozen=True, slots=True)
class Span:
    """From which moment to before which, on the wall clock."""

    from_ms: int
    until_ms: int


def first_number(connection: Reading, from_ms: int) -> int:
    """The number before the first decision of a moment, found by halves; numbers rise with time."""
    low, high = connection.execute(_ENDS).one()
    low, high = int(low or 0), int(high or 0) + 1
    while low < high:
        middle = (low + high) // 2
        row = connection.execute(_FROM, {"number": middle}).one_or_none()
        if row is None or row.at_ms >= from_ms - ORDER_SLACK_MS:
            high = middle
        else:
            low = int(row.number) + 1
    return low - 1


def page(connection: Reading, config: Mapping[str, Any], after: int, span: Span) -> Page:
    """The next decisions of a line item after a number."""
    row = {"id": config["id"], "after": after, "limit": PAGE_ROWS}
    found = [dict(one._mapping) for one in connection.execute(_PAGE, row)]
    inside = [one for one in found if span.from_ms <= one["at_ms"] < span.until_ms]
    real = [one for one in inside if not one["test"]]
    said = _said(connection, config, [_bid(one["ref"]) for one in real if one["ref"]])
    zone = config["flight"]["time_zone"]
    lines = [
        Line(one, local_day(one["at_ms"], zone), said.get(_bid(one["ref"]), Said()))
        if one["ref"]
        else Line(one, local_day(one["at_ms"], zone), Said())
        for one in real
    ]
    # Beyond the slack nothing of the span can follow, though the log goes on.
    over = len(found) < PAGE_ROWS or found[-1]["at_ms"] >= span.until_ms + ORDER_SLACK_MS
    end = None if over else int(found[-1]["number"])
    return Page(lines, len(inside) - len(real), end, now_ms(connection))


def spent_before(connection: Reading, line_item: str, from_ms: int) -> int:
    """What the line item had spent before a moment, refunds taken off, in nanos."""
    spent, low, high = connection.execute(_HEAD, {"id": line_item}).one()
    # One beyond the head: the moment may lie after all that was booked.
    high += 1
    while low < high:
        # The stream has no gaps and its times never fall, so the moment is found by halves.
        middle = (low + high) // 2
        at_ms = connection.execute(_AT, {"id": line_item, "seq": middle}).scalar_one_or_none()
        low, high = (low, middle) if at_ms is None or at_ms >= from_ms else (middle + 1, high)
    since = connection.execute(_SPENT, {"id": line_item, "seq": low}).scalar_one()
    return max(0, int(spent) - int(since))


def recent_outcomes(connection: Reading, line_item: str) -> list[tuple[str, dict[str, Any]]]:
    """Kind and body of the newest outcomes of a line item, at most so many."""
    rows = connection.execute(_RECENT, {"id": line_item, "limit": RECENT})
    return [(row.kind, json.loads(row.body)) for row in rows]


def _said(connection: Reading, config: Mapping[str, Any], bids: list[bytes]) -> dict[bytes, Said]:
    cancelled = cancellations(connection, config["id"])
    entries: dict[bytes, list[Any]] = {}
    row = {"ids": sorted(set(bids)), "line_item": config["id"]}
    for one in connection.execute(_OF_BIDS, row):
        entries.setdefault(bytes(one.bid), []).append(one)
    return {bid: _told(rows, config, cancelled) for bid, rows in entries.items()}


def _told(rows: list[Any], config: Mapping[str, Any], cancelled: Cancelled) -> Said:
    bodies = {row.slot: json.loads(row.body) for row in rows}
    kinds = {row.slot: row.kind for row in rows}
    result, notes = _result(kinds), set[str]()
    paying = [row for row in rows if row.kind in PAYING]
    told = bodies.get("result") or bodies.get("billed") or {}
    if any(
        MARKET not in cancelled.leaves(row.seq, row.kind)
        for row in rows
        if row.kind in ("won", "lost")
    ):
        notes.add(RETRACTED)
        result = "silent"
    if any(row.kind == "conflict" and "said" in bodies[row.slot] for row in rows):
        # Two words of one auction: whichever is wrong, we cannot tell.
        notes.add(CONTRADICTED)
        result = "silent"
    paid_ms = min((row.service_ms for row in paying), default=None)
    paid = bodies.get("billed") or bodies.get("result") or {}
    # What a price asks beyond the bid is disputed, and no cost yet.
    price = min(paid.get("price") or 0, told.get("bid", 0))
    amount, valued, untold = 0, False, False
    for row in rows:
        if row.kind == "value":
            body = bodies[row.slot]
            if VALUE not in cancelled.leaves(row.seq, row.kind):
                untold = True
            # By service time, in which an outage lets no window run out.
            elif paid_ms is not None and row.service_ms - paid_ms > config["value"]["window_ms"]:
                notes.add(LATE)
            else:
                amount, valued = amount + body["amount"] - (body["was"] or 0), True
    if untold or any(VALUE not in cancelled.leaves(r.seq, r.kind) for r in paying):
        # Somebody said that what it brought is not to be believed: it may be anything.
        notes.add(RETRACTED)
        return Said(result, told, price, 0, False, None, tuple(sorted(notes)))
    return Said(result, told, price, amount, valued, paid_ms, tuple(sorted(notes)))


def _result(kinds: Mapping[str, str]) -> str:
    # A void may come after a win that was never billed.
    if "void" in kinds:
        return "void"
    return kinds.get("result") or ("won" if "billed" in kinds else "silent")


def _bid(ref: str) -> bytes:
    # Refs are written without the padding that 16 bytes take.
    return urlsafe_b64decode(ref + "==")


_ENDS = text("SELECT min(number), max(number) FROM decision")
_FROM = text("SELECT number, at_ms FROM decision WHERE number >= :number ORDER BY number LIMIT 1")
_PAGE = text(
    "SELECT * FROM decision WHERE line_item = :id AND number > :after ORDER BY number LIMIT :limit"
)
_OF_BIDS = among(
    "SELECT bid, seq, slot, kind, service_ms, body FROM stream WHERE bid IN :ids"
    " AND line_item = :line_item"
    " AND kind IN ('won', 'lost', 'void', 'billed', 'value', 'conflict')"
    " ORDER BY seq",
    of=LargeBinary,
)
_HEAD = text("SELECT spent, 1, seq FROM balance WHERE line_item = :id")
_AT = text("SELECT at_ms FROM stream WHERE line_item = :id AND seq = :seq")
_SPENT = text(
    "SELECT coalesce(sum(CASE WHEN kind = 'reversal' THEN -cost ELSE cost END), 0)"
    " FROM stream WHERE line_item = :id AND seq >= :seq"
)
_RECENT = text(
    "SELECT kind, body FROM stream WHERE line_item = :id AND kind IN ('won', 'lost', 'void')"
    " ORDER BY seq DESC LIMIT :limit"
)
