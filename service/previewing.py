"""What an order that takes lessons back finds and would change; reads only, in one view.

Apart from the orders, which find the same and then do it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from service.decision.describing import describe
from service.decision.price import ready
from service.decision.terms import Terms
from service.errors import Malformed, PoisonLesson
from service.learner.memory import Memory
from service.ledger.cancelling import ALL, PARTS, Cancelled, Finder, Named, Span
from service.ledger.entries import Entry
from service.recounting import said
from service.store import learners, lessons, line_items, rebuilds, records
from service.store.clock import now_ms
from service.store.database import Reading, Writing
from service.store.learners import digest_of
from service.store.rebuilds import Standing, Start
from service.store.teachers import ENTRIES_MAX
from service.teaching import FRESH, lesson

SPANS_SHOWN_MAX = 20
NEAR = 2000  # Spans with fewer entries between them are read in one go.
SHOWN = (
    *("method", "wins", "known", "converted", "set_by", "pass"),
    *("mean_nanos", "low_nanos", "high_nanos"),
)

GoesOn = Callable[[], bool]  # Whether there is still time; a preview says where it stopped.


def always() -> bool:
    """There is time for all of it."""
    return True


@dataclass(frozen=True, slots=True)
class Taken:
    """
    What an order takes back: spans of the stream and how many lessons of each kind.

    Args:
        whole: Whether all was found that there is, and not only what time allowed.
    """

    spans: list[Span]
    counts: dict[str, int]
    whole: bool = True


@dataclass(slots=True)
class Sums:
    """What cancelled lessons had taught; money in nanos, moments in wall clock ms."""

    by_part: dict[str, dict[str, int]] = field(default_factory=dict)
    value: int = 0
    cost: int = 0
    first_ms: int | None = None
    last_ms: int | None = None
    whole: bool = True

    def take(self, row: Any, parts: Iterable[str]) -> None:
        """Count an entry of which these parts go."""
        for part in parts:
            kinds = self.by_part.setdefault(part, {})
            kinds[row.kind] = kinds.get(row.kind, 0) + 1
        if self.first_ms is None:
            self.first_ms = row.at_ms
        self.last_ms = row.at_ms
        # Money stays spent whatever is taken back; it is told, not returned.
        self.cost += row.cost
        if row.kind == "value":
            body = said(row.body)
            amount, was = body.get("amount"), body.get("was")
            self.value += amount - (was or 0) if isinstance(amount, int) else 0

    @property
    def shown(self) -> dict[str, Any]:
        """As people read it."""
        return {
            "by_part": self.by_part,
            "value_nanos": self.value,
            "cost_nanos": self.cost,
            "first_at_ms": self.first_ms,
            "last_at_ms": self.last_ms,
        }


def preview(
    connection: Reading, line_item: str, taken: Taken, kind: str, wall_ms: int, goes_on: GoesOn
) -> dict[str, Any]:
    """
    What a retract or a rewind would do, without doing it.

    Its `after` is the state that the order leaves if nothing else comes before it and no time
    passes: the same bytes, which both say by their digest. Windows close with time, and pacing
    reads the wall clock, so a digest given later differs although the same lessons went.
    """
    now, before = rebuilds.standing(connection, line_item), estimate(connection, line_item)
    told = {**shown(line_item, taken), "preview": True, "as_of_seq": now.head, "before": before}
    if not taken.spans:
        return {**told, **Sums().shown, **_folded(before), "complete": taken.whole}
    cancelled = lessons.cancellations(connection, line_item)
    more = cancelled.and_also(taken.spans)
    sums = _summed(
        *(connection, line_item, _runs(taken.spans), goes_on),
        lambda row: cancelled.leaves(row.seq, row.kind) - more.leaves(row.seq, row.kind),
    )
    first = min(span[0] for span in taken.spans)
    start = Start(now.seq, now.working)
    if now.seq >= first:
        start = rebuilds.nearest(connection, line_item, first - 1, FRESH)
    whole = taken.whole and sums.whole
    after = _not_folded(now.head - start.seq)
    # Of half of what would go, a state would tell nothing.
    if whole:
        after = _after(connection, line_item, now, start, more, Entry(kind, {}), wall_ms, goes_on)
    return {**told, **sums.shown, **after, "complete": whole}


def preview_reset(
    connection: Reading, line_item: str, wall_ms: int, goes_on: GoesOn
) -> dict[str, Any]:
    """What a reset would let be forgotten, and the learner after it."""
    line_items.one(connection, line_item)
    now, before = rebuilds.standing(connection, line_item), estimate(connection, line_item)
    cancelled = lessons.cancellations(connection, line_item)
    last = lessons.last_reset(connection, line_item, cancelled)
    sums = _summed(
        *(connection, line_item, [(last + 1, now.head)], goes_on),
        lambda row: cancelled.leaves(row.seq, row.kind),
    )
    start, entry = Start(now.seq, now.working), Entry("reset", {})
    after = _after(connection, line_item, now, start, cancelled, entry, wall_ms, goes_on)
    told = {"line_item": line_item, "preview": True, "as_of_seq": now.head, "before": before}
    return {**told, **sums.shown, **after, "complete": sums.whole}


def found(connection: Reading, line_item: str, named: Named, goes_on: GoesOn = always) -> Taken:
    """What a name means in the stream as it stands."""
    looked, whole = finder(connection, line_item, named, goes_on)
    return Taken(looked.spans, looked.counts, whole)


def finder(
    connection: Reading | Writing, line_item: str, named: Named, goes_on: GoesOn = always
) -> tuple[Finder, bool]:
    """Somebody who has read the stream for a name, and whether to its end."""
    line_items.one(connection, line_item)
    looking = begun(connection, line_item, named, lessons.cancellations(connection, line_item))
    return looking, lessons.find(connection, line_item, looking, goes_on)


def begun(
    connection: Reading | Writing, line_item: str, named: Named, cancelled: Cancelled
) -> Finder:
    """Somebody who begins to read where the name can first mean anything."""
    looking = Finder(named, cancelled)
    # Corrections come after what they correct, and bids before their values; only a source
    # must be known from outcomes that may lie before the span, and an event can be anywhere.
    if named.source is None and named.from_ms is not None:
        looking.read_until = records.seq_before(connection, line_item, named.from_ms)
    elif named.bids and not named.events:
        looking.read_until = lessons.first_of(connection, line_item, named.bids) - 1
    return looking


def after(
    connection: Reading | Writing, line_item: str, to: int, at_ms: int | None
) -> tuple[int, Taken]:
    """
    Every lesson behind a moment that still teaches, as one span, and the seq of the moment.

    Raises:
        Malformed: The stream has not come so far.
    """
    line_items.one(connection, line_item)
    head = records.head(connection, line_item)
    seq = to if at_ms is None else records.seq_before(connection, line_item, at_ms + 1)
    if seq > head:
        raise Malformed("not_so_far", "The stream of this line item has not come so far.")
    cancelled = lessons.cancellations(connection, line_item)
    counts = lessons.counts_after(connection, line_item, seq, sorted(PARTS), cancelled)
    return seq, Taken([(seq + 1, head, ALL)] if counts else [], counts)


def estimate(connection: Reading | Writing, line_item: str) -> dict[str, Any]:
    """What the published snapshot knows and bids."""
    row = line_items.one(connection, line_item)
    return _told(learners.snapshots(connection, [line_item])[line_item].state, row.config)


def shown(line_item: str, taken: Taken) -> dict[str, Any]:
    """What goes, as orders and previews tell it."""
    spans = [[first, last] for first, last, _ in taken.spans[:SPANS_SHOWN_MAX]]
    return {
        "line_item": line_item,
        "cancelled": sum(taken.counts.values()),
        "counts": taken.counts,
        "spans": spans,
        "spans_in_all": len(taken.spans),
    }


def _told(state: bytes, config: Mapping[str, Any]) -> dict[str, Any]:
    told = describe(ready(Memory.from_bytes(state), Terms.from_config(config)))
    known = {name: told[name] for name in SHOWN}
    return known | {"bid_cpm_nanos": told["bid_nanos"], "digest": digest_of(state)}


def _after(
    connection: Reading,
    line_item: str,
    now: Standing,
    start: Start,
    cancelled: Cancelled,
    order: Entry,
    wall_ms: int,
    goes_on: GoesOn,
) -> dict[str, Any]:
    """The learner at the head, and then the order's own entry, as if it were given now."""
    state, seq = start.state, start.seq
    try:
        while seq < now.head:
            if not goes_on():
                return _not_folded(now.head - seq)
            limit = min(ENTRIES_MAX, now.head - seq)
            page = lessons.read(connection, line_item, seq, limit, cancelled)
            state, seq = lesson(state, page.lessons, now.config), page.end
        own = (order.kind, order.body, now_ms(connection), wall_ms, 0)
        state = lesson(state, [own], now.config)
    except PoisonLesson:
        return {**_not_folded(now.head - seq), "why_not_folded": "a_lesson_cannot_be_learnt"}
    return _folded(_told(state, now.config))


def _folded(after: dict[str, Any]) -> dict[str, Any]:
    return {"after": after, "folded": True, "why_not_folded": None}


def _not_folded(left: int) -> dict[str, Any]:
    why = {"why_not_folded": "too_large", "entries_left_to_fold": left}
    return {"after": None, "folded": False, **why}


def _summed(
    connection: Reading,
    line_item: str,
    runs: list[tuple[int, int]],
    goes_on: GoesOn,
    parts_of: Callable[[Any], Iterable[str]],
) -> Sums:
    # Page by page, so that a long stream neither fills memory nor outlasts the caller.
    sums = Sums()
    for first, last in runs:
        seq = first - 1
        while seq < last:
            if not goes_on():
                sums.whole = False
                return sums
            until = min(seq + ENTRIES_MAX, last)
            for row in records.window(connection, line_item, seq, until, sorted(PARTS)):
                if parts := sorted(parts_of(row)):
                    sums.take(row, parts)
            seq = until
    return sums


def _runs(spans: list[Span]) -> list[tuple[int, int]]:
    """Spans that lie near one another joined, since a read costs more than a few entries."""
    runs = list[tuple[int, int]]()
    for first, last, _ in sorted(spans):
        if runs and first <= runs[-1][1] + NEAR:
            runs[-1] = runs[-1][0], max(last, runs[-1][1])
        else:
            runs.append((first, last))
    return runs
