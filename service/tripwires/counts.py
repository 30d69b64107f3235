"""What a line item did in a stretch of time, as sums of whole numbers that one entry adds to.

Apart from the rules, since the same sums are kept in the database, read live and replayed.
Money in nanos; logarithms of values in thousandths, so that their sums are whole numbers too.
"""

from __future__ import annotations

import math
from bisect import bisect_left
from collections.abc import Iterable, Mapping
from functools import cached_property
from itertools import accumulate
from operator import add, sub
from typing import Any, NamedTuple

RESULT = "result"
# Far finer than values vary, and squares still add up in 64 bits for billions of values.
LOG_UNITS = 1000


class Counts(NamedTuple):
    """
    Sums over a stretch of time, by the moment at which news arrived.

    Args:
        bids: Bids known to have gone out, by their outcome or a worker's report.
        late: Outcomes that came after their grace.
        paid: Sum of the prices of wins.
        spent: Cost accepted.
        words: First values of an event; `zeros` of them said nothing was earned.
        parked: Values that came before their win; `unparked` of them have found it.
        logs: Sum of ln(nanos) of the values above 0; `log_squares` of their squares.
        unfunded: How much unfunded cost has moved; so for disputed, and for the learner's halt.
    """

    bids: int = 0
    wins: int = 0
    losses: int = 0
    voids: int = 0
    late: int = 0
    paid: int = 0
    spent: int = 0
    words: int = 0
    zeros: int = 0
    parked: int = 0
    unparked: int = 0
    logs: int = 0
    log_squares: int = 0
    refused: int = 0
    unfunded: int = 0
    disputed: int = 0
    halted: int = 0

    @property
    def results(self) -> int:
        """Bids whose outcome has come."""
        return self.wins + self.losses + self.voids

    @property
    def conversions(self) -> int:
        """Events that earned something."""
        return self.words - self.zeros


NAMES = Counts._fields
NOTHING = Counts()


def plus(one: Counts, other: Counts) -> Counts:
    """Both together."""
    return Counts(*map(add, one, other))


def minus(one: Counts, other: Counts) -> Counts:
    """One without the other."""
    return Counts(*map(sub, one, other))


def counted(kind: str, slot: str | None, body: Mapping[str, Any], cost: int) -> Counts:
    """What one entry of the stream adds; a kind that no rule looks at adds nothing."""
    # A bid is counted by its outcome or by a report, never by both; the entry says which.
    rounds, late = int(body.get("round") or 0), int(bool(body.get("late")))
    if kind == "won" and slot == RESULT:
        return Counts(rounds, wins=1, late=late, paid=int(body["price"]), spent=cost)
    if kind == "lost":
        return Counts(rounds, losses=1, late=late)
    if kind == "void" and slot == RESULT:
        return Counts(rounds, voids=1, late=late)
    if kind in ("tick", "retire"):
        return Counts(int(body["rounds"]))
    # A correction is no further value, and sizes are judged by what was said first.
    if kind == "value" and body.get("was") is None:
        return _word(int(body["amount"]), bool(body.get("parked")))
    if kind == "parked":
        return Counts(parked=1)
    return Counts(spent=cost) if kind in ("billed", "conflict") else NOTHING


def _word(amount: int, parked: bool) -> Counts:
    if amount <= 0:
        return Counts(words=1, zeros=1, unparked=int(parked))
    log = round(LOG_UNITS * math.log(amount))
    return Counts(words=1, unparked=int(parked), logs=log, log_squares=log * log)


class Series:
    """Buckets of one width in order of time, so summed up that any stretch is one subtraction."""

    def __init__(self, span_ms: int, buckets: Iterable[tuple[int, Counts]]) -> None:
        self.span_ms = span_ms
        rows = sorted(buckets)
        self.starts = [start for start, _ in rows]
        self.buckets = [counts for _, counts in rows]

    @cached_property
    def _sums(self) -> list[Counts]:
        # Only when somebody asks for a stretch: most look at single hours and days.
        return list(accumulate(self.buckets, plus, initial=NOTHING))

    def between(self, from_ms: int, until_ms: int) -> Counts:
        """The sums of the buckets that begin in this stretch."""
        first, last = bisect_left(self.starts, from_ms), bisect_left(self.starts, until_ms)
        return minus(self._sums[max(first, last)], self._sums[first])

    def at(self, start_ms: int) -> Counts:
        """The bucket that begins at this moment, empty where none was kept."""
        place = bisect_left(self.starts, start_ms)
        found = place < len(self.starts) and self.starts[place] == start_ms
        return self.buckets[place] if found else NOTHING

    def floor(self, at_ms: int) -> int:
        """The beginning of the bucket of a moment."""
        return at_ms - at_ms % self.span_ms
