"""What auctions told about the highest competing bid, as whole counts per price tick.

Apart from the estimators: counts of one kind of line item and source are small, add up in any
order, and say nothing about how a curve is drawn through them.

A competing bid stands at the tick at or above it; a bid of ours off the ticks is moved to the
tick that leaves what is told true. It must move before one looks at who won, or the part of a
cell below the bid would be seen and the part above it not, which bends the curve.
"""

from __future__ import annotations

import struct
from collections.abc import Iterable
from dataclasses import dataclass
from itertools import count, pairwise
from typing import Literal, NamedTuple

import numpy as np

from service.learner.arrays import Numbers, double
from service.learner.partition import Ticks
from service.learner.sealed import sealed, unsealed

FORM = 1
CELLS_MAX = 1_500  # With every tick visited a state stays under 64 KiB.
CELLS_FITTING = 1_000
# A count is kept in parts, so that forgetting leaves fractions and still whole numbers.
PARTS = 2**16
KEPT_WHOLE = 2**32
COLUMNS = 5
SEEN, ABOVE, BELOW, WON, LOST = range(COLUMNS)
COUNT_MAX = 2**63 - 1

Feed = Literal["always", "on_win", "on_loss", "never"]

_HEAD = struct.Struct(">3sBQQ")
_ROW = struct.Struct(">H5q")
_NAME = b"crv"


class UnreadableCurve(ValueError):
    """The bytes are not counts of the form we write, or on other ticks."""


class BadOutcome(ValueError):
    """An outcome outside its range, or a price on the wrong side of the bid."""


class Outcome(NamedTuple):
    """
    One auction; money in nanos per impression.

    Args:
        bid: What we bid, from 0 to the top of the ticks; for a pass under the floor, what we
            would have bid.
        won: Whether it won; a bid that equals the highest competing bid wins.
        least: The highest competing bid, floor included, where it was told.
        feed: When this source tells it: always, only to a winner, only to a loser, never. It is
            a property of the source; guessing it from one outcome would hide who stays silent.
    """

    bid: int
    won: bool
    least: int | None
    feed: Feed


@dataclass(frozen=True, slots=True)
class Counts:
    """
    Counts at each place, in parts of 2^-16; place 0 is a competing bid of nothing.

    Args:
        rows: Place and five counts, ascending by place: competing bids seen there, known to
            be above it, known to be at or below it, and bids there won and lost without a price.
            Place `cells + 1` takes the competing bids that no bid of ours could have beaten.
    """

    ticks: Ticks
    rows: tuple[tuple[int, tuple[int, int, int, int, int]], ...] = ()

    def __post_init__(self) -> None:
        if self.ticks.cells > CELLS_MAX:
            raise UnreadableCurve(f"more than {CELLS_MAX} cells")

    @property
    def auctions(self) -> float:
        """How many auctions are counted, those half forgotten as halves."""
        return sum(sum(row) for _, row in self.rows) / PARTS

    def column(self, which: int) -> Numbers:
        """One of the five counts at places 0 to `cells + 1`, in auctions."""
        dense = np.zeros(self.ticks.cells + 2)
        for place, row in self.rows:
            dense[place] = row[which] / PARTS
        return double(dense)

    def to_bytes(self) -> bytes:
        """Equal counts give equal bytes; 42 for each place visited and 24 more."""
        head = _HEAD.pack(_NAME, FORM, self.ticks.top, self.ticks.tick)
        body = head + b"".join(_ROW.pack(place, *row) for place, row in self.rows)
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes, ticks: Ticks) -> Counts:
        """
        Read what `to_bytes` wrote on the same ticks.

        Raises:
            UnreadableCurve: Another form, other ticks, or not whole.
        """
        body, sound = unsealed(state)
        rest = len(body) - _HEAD.size
        if rest < 0 or rest % _ROW.size or not sound:
            raise UnreadableCurve("not whole")
        if body[: _HEAD.size] != _HEAD.pack(_NAME, FORM, ticks.top, ticks.tick):
            raise UnreadableCurve("another form, or other ticks")
        return Counts(ticks, _rows(body[_HEAD.size :], ticks.cells + 1))


def fitting(top: int) -> Ticks:
    """The finest ticks of 1, 2 or 5 times a power of ten that give at most 1,000 cells."""
    steps = (step * 10**power for power in count() for step in (1, 2, 5))
    return Ticks(top, next(tick for tick in steps if tick > 1 and top // tick <= CELLS_FITTING))


def prices(ticks: Ticks) -> Numbers:
    """The price in nanos of places 0 to `cells`; the last is the top."""
    at = np.arange(ticks.cells + 1) * float(ticks.tick)
    at[-1] = ticks.top
    return double(at)


def add(counts: Counts, outcomes: Iterable[Outcome]) -> Counts:
    """
    Count outcomes; pure, and the same in any order.

    Raises:
        BadOutcome: See there; the counts given are as they were.
    """
    rows = {place: list(row) for place, row in counts.rows}
    for outcome in outcomes:
        place, column = told(outcome, counts.ticks)
        row = rows.setdefault(place, [0] * COLUMNS)
        row[column] = min(row[column] + PARTS, COUNT_MAX)
    return _of(counts.ticks, rows)


def discount(counts: Counts, kept: int) -> Counts:
    """
    Keep `kept` parts in 2^32 of every count, rounded down; between moments, never within one.

    Raises:
        ValueError: Not between 0 and 2^32.
    """
    if not 0 <= kept <= KEPT_WHOLE:
        raise ValueError("a share is kept, so from 0 to 2^32")
    return _of(
        counts.ticks, {p: [one * kept // KEPT_WHOLE for one in row] for p, row in counts.rows}
    )


def told(outcome: Outcome, ticks: Ticks) -> tuple[int, int]:
    """
    The place and the column in which an outcome counts.

    Right-censored (`on_win`): as if we had bid the tick below, so m is seen up to it and else
    known to be above. Left-censored (`on_loss`): the tick above. Without a price a bid counts
    at the tick above, whose win rate it can only lower.

    Raises:
        BadOutcome: See there.
    """
    _check(outcome, ticks)
    bid, won, least, feed = outcome
    over = up(bid, ticks)
    if least is None:
        return _untold(outcome, ticks, over)
    if feed == "always":
        return up(least, ticks), SEEN
    if feed == "on_win" and won:
        under = down(bid, ticks)
        return (up(least, ticks), SEEN) if up(least, ticks) <= under else (under, ABOVE)
    if feed == "on_loss" and not won:
        return (up(least, ticks), SEEN) if up(least, ticks) > over else (over, BELOW)
    return over, WON if won else LOST


def _untold(outcome: Outcome, ticks: Ticks, over: int) -> tuple[int, int]:
    if outcome.feed == "on_win" and not outcome.won:
        return down(outcome.bid, ticks), ABOVE
    if outcome.feed == "on_loss" and outcome.won:
        return over, BELOW
    return over, WON if outcome.won else LOST


def up(price: int, ticks: Ticks) -> int:
    """The place of the tick at or above a price; one past the last for what is above the top."""
    return ticks.cells + 1 if price > ticks.top else min(-(-price // ticks.tick), ticks.cells)


def down(price: int, ticks: Ticks) -> int:
    """The place of the tick at or below a price."""
    return ticks.cells if price >= ticks.top else min(price // ticks.tick, ticks.cells - 1)


def _check(outcome: Outcome, ticks: Ticks) -> None:
    if not 0 <= outcome.bid <= ticks.top:
        raise BadOutcome("a bid outside the ticks")
    if outcome.least is not None and (
        outcome.least < 0 or (outcome.least <= outcome.bid) is not outcome.won
    ):
        raise BadOutcome("a competing bid on the wrong side of the bid")


def _of(ticks: Ticks, rows: dict[int, list[int]]) -> Counts:
    kept = sorted((place, (*row,)) for place, row in rows.items() if any(row))
    return Counts(ticks, tuple((p, (a, b, c, d, e)) for p, (a, b, c, d, e) in kept))


def _rows(packed: bytes, last: int) -> tuple[tuple[int, tuple[int, int, int, int, int]], ...]:
    rows = tuple((p, (a, b, c, d, e)) for p, a, b, c, d, e in _ROW.iter_unpack(packed))
    places = [place for place, _ in rows]
    if any(left >= right for left, right in pairwise([-1, *places, last + 1])):
        raise UnreadableCurve("places out of order")
    if any(min(row) < 0 or not any(row) for _, row in rows):
        raise UnreadableCurve("a count below nought, or an empty place")
    return rows
