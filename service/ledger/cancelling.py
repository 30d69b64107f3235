"""Which entries teach no more: pure sets of seqs, and the lessons that are left without them.

Apart from the fold, which never learns that anything was cancelled. Money is not touched: a
cancelled entry stands in the stream as it stood.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from service.ledger.entries import PAYING

VALUE, MARKET, ALL = "value", "market", "all"
COVERS = {VALUE: {VALUE}, MARKET: {MARKET}, "both": {VALUE, MARKET}, ALL: {VALUE, MARKET, ALL}}
# What an entry teaches; a reset and a prior are undone by a rewind only.
PARTS: dict[str, frozenset[str]] = {
    "won": frozenset({VALUE, MARKET}),
    "billed": frozenset({VALUE}),
    "value": frozenset({VALUE}),
    "lost": frozenset({MARKET}),
    "void": frozenset({MARKET}),
    "tick": frozenset({MARKET}),
    "retire": frozenset({MARKET}),
    "prior": frozenset({ALL}),
    "reset": frozenset({ALL}),
}

Body = Mapping[str, Any]
Span = tuple[int, int, str]  # First seq, last seq and the part that teaches no more.
Told = tuple[int, str, Body]  # Seq, kind and body.


class Cancelled:
    """
    The cancellations in force on one stream.

    Args:
        paid_by: "won" or "billed": the entry by which an impression counts as bought.
    """

    def __init__(self, spans: Iterable[Span] = (), paid_by: str = "won") -> None:
        self.spans, self.paid_by = list(spans), paid_by
        self._runs = {part: _merged(self.spans, part) for part in (VALUE, MARKET, ALL)}

    def __bool__(self) -> bool:
        return bool(self.spans)

    def and_also(self, spans: Iterable[Span]) -> Cancelled:
        """These and more."""
        return Cancelled([*self.spans, *spans], self.paid_by)

    def parts(self, seq: int) -> set[str]:
        """The parts of this entry that teach no more."""
        return {part for part, runs in self._runs.items() if _inside(runs, seq)}

    def leaves(self, seq: int, kind: str) -> frozenset[str]:
        """The parts of this entry that still teach."""
        return PARTS.get(kind, frozenset()) - self.parts(seq)


@dataclass(frozen=True, slots=True)
class Named:
    """
    What an operator names: bids and events together, or a source and a span of time.

    Args:
        part: "value", "market" or "both".
        from_ms: First moment of the span on the wall clock of the entries.
        until_ms: The first moment after it.
    """

    part: str
    bids: frozenset[bytes] = frozenset()
    events: frozenset[str] = frozenset()
    source: str | None = None
    from_ms: int | None = None
    until_ms: int | None = None


class Finder:
    """Reads a stream in order and keeps what a name means in it; may be stopped and go on."""

    def __init__(self, named: Named, cancelled: Cancelled) -> None:
        self._named, self.cancelled = named, cancelled
        self._wanted = COVERS[named.part]
        self._of_source = set[bytes]()
        self._events = set[tuple[bytes, str]]()
        self.seqs = list[int]()
        self.counts = dict[str, int]()
        self.read_until = 0

    def take(self, seq: int, kind: str, bid: bytes | None, at_ms: int, body: Body) -> None:
        """Look at the next entry."""
        self.read_until = seq
        # Outcomes name their source and values do not, so values are known by their bid.
        if bid is not None and body.get("source") == self._named.source is not None:
            self._of_source.add(bid)
        if not self._means(kind, bid, at_ms, body):
            return
        # Noted even if it is cancelled already, for its corrections must go with it.
        if kind == "value" and bid is not None:
            self._events.add((bid, str(body.get("event_id"))))
        # What teaches nothing any more is not cancelled twice: so a repeat finds nothing.
        if self.cancelled.leaves(seq, kind) & self._wanted:
            self.seqs.append(seq)
            self.counts[kind] = self.counts.get(kind, 0) + 1

    @property
    def spans(self) -> list[Span]:
        """What was found, as few spans as it takes."""
        found = list[Span]()
        for seq in self.seqs:
            if found and found[-1][1] == seq - 1:
                found[-1] = (found[-1][0], seq, self._named.part)
            else:
                found.append((seq, seq, self._named.part))
        return found

    def _means(self, kind: str, bid: bytes | None, at_ms: int, body: Body) -> bool:
        named = self._named
        if not PARTS.get(kind, frozenset()) & self._wanted:
            return False
        # A correction goes with what it corrects, or it would correct what nobody was taught.
        if kind == "value" and bid is not None and (bid, body.get("corrects")) in self._events:
            return True
        if named.bids or named.events:
            return bid in named.bids or (kind == "value" and body.get("event_id") in named.events)
        if named.source is not None and bid not in self._of_source:
            return False
        begun = named.from_ms is None or at_ms >= named.from_ms
        return begun and (named.until_ms is None or at_ms < named.until_ms)


def left(seq: int, kind: str, body: Body, cancelled: Cancelled) -> Body | None:
    """The lesson that is left of an entry, or None; `only` names the part that is left."""
    parts = PARTS.get(kind)
    if parts is None:
        return body
    rest = cancelled.leaves(seq, kind)
    if not rest:
        return None
    # There are two parts besides the whole, so what is left is one.
    return body if rest == parts else {**body, "only": min(rest)}


def retold(rows: Sequence[Told], cancelled: Cancelled) -> dict[int, Body | None]:
    """
    The values of one bid as if what is cancelled had never been said, by seq.

    Args:
        rows: What was paid for the bid and what it has brought, in order.
    """
    told, taught = dict[int, Body | None](), dict[str, int]()
    total, out, whole = 0, False, True
    for seq, kind, body in rows:
        rest = cancelled.leaves(seq, kind)
        if kind in PAYING:
            out = out or (kind == cancelled.paid_by and VALUE not in rest)
            whole = whole and rest == PARTS[kind]
        elif out or not rest:
            # An impression that counts no more can bring nothing either.
            told[seq] = None
        elif isinstance(body.get("amount"), int):
            # What a cancelled event said was never said, so its correction stands as a first word.
            was, amount = taught.get(body["corrects"]), body["amount"]
            said = body if whole else {k: v for k, v in body.items() if k != "win"}
            told[seq] = {**said, "was": was, "total_was": total}
            total, taught[body["event_id"]] = total + amount - (was or 0), amount
    return told


Runs = tuple[list[int], list[int]]  # First and last seqs of runs that do not touch, in order.


def _merged(spans: list[Span], part: str) -> Runs:
    firsts, lasts = list[int](), list[int]()
    for first, last, _ in sorted(span for span in spans if part in COVERS[span[2]]):
        if lasts and first <= lasts[-1] + 1:
            lasts[-1] = max(last, lasts[-1])
        else:
            firsts.append(first)
            lasts.append(last)
    return firsts, lasts


def _inside(runs: Runs, seq: int) -> bool:
    at = bisect_right(runs[0], seq)
    return at > 0 and runs[1][at - 1] >= seq
