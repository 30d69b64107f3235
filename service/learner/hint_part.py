"""What hints were worth, with those whose window is open kept apart by age.

The ratio is that of `hints`; here is when a hint counts. Where one value is the whole value it
counts with it. Where values accrue it counts by the share of its value that had time to come,
as impressions do elsewhere, so that hints on their way do not pull the ratio down.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

from service.learner import hints
from service.learner.hints import Hints, UnreadableHints
from service.learner.impressions import Said, begun_afresh, said
from service.learner.lesson import Lesson
from service.learner.memory import UnreadableMemory
from service.learner.rules import CELLS, Rules

NOTHING = Hints()
CELLS_MAX = 2 * CELLS

_HEAD = struct.Struct(">QQ")
_CELL = struct.Struct(">QQ16s")
_CLOSED = len(NOTHING.to_bytes())


class Cell(NamedTuple):
    """Impressions with a hint bought from `start_ms` on; the sum of their hints in nanos."""

    start_ms: int
    impressions: int
    hinted: int


@dataclass(frozen=True, slots=True)
class Book:
    """
    Hints that count in full, and those that are still open.

    Args:
        closed: Hints whose value is known, and every value.
        cells: Those whose window is open, oldest first.
        clock_ms: Service time of the last lesson.
        heard_ms: When the last value came, or the first impression; 0 before.
    """

    closed: Hints = NOTHING
    cells: tuple[Cell, ...] = ()
    clock_ms: int = 0
    heard_ms: int = 0

    def to_bytes(self) -> bytes:
        """Equal books give equal bytes; none before the first hint."""
        if self.closed == NOTHING and not self.cells and not self.heard_ms:
            return b""
        cells = (_CELL.pack(c.start_ms, c.impressions, c.hinted.to_bytes(16)) for c in self.cells)
        clocks = _HEAD.pack(self.clock_ms, self.heard_ms)
        return self.closed.to_bytes() + clocks + b"".join(cells)

    @staticmethod
    def from_bytes(state: bytes) -> Book:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadableMemory: Another form, or not whole.
        """
        if not state:
            return Book()
        head, rest = state[_CLOSED : _CLOSED + _HEAD.size], state[_CLOSED + _HEAD.size :]
        if len(head) != _HEAD.size or len(rest) % _CELL.size:
            raise UnreadableMemory("hints that are not whole")
        try:
            closed = Hints.from_bytes(state[:_CLOSED])
        except UnreadableHints as error:
            raise UnreadableMemory("hints of another form") from error
        packed = _CELL.iter_unpack(rest)
        cells = tuple(Cell(start, count, int.from_bytes(sum_)) for start, count, sum_ in packed)
        return Book(closed, cells, *_HEAD.unpack(head))

    def counted(self, shares: Sequence[float]) -> Hints:
        """All hints, those of each cell by the share of their values that had time to come."""
        hinted = sum(round(c.hinted * share) for c, share in zip(self.cells, shares, strict=True))
        return _with(self.closed, Cell(0, sum(cell.impressions for cell in self.cells), hinted))


def learn(state: bytes, lessons: Sequence[Lesson], rules: Rules) -> bytes:
    """Add what hinted impressions were worth; the part `hints` of a memory."""
    reset, rest = begun_afresh(lessons)
    keeping = _Keeping(Book() if reset else Book.from_bytes(state), rules)
    for lesson in rest:
        keeping.pass_time(lesson.at_ms)
        for _, one in said([lesson], rules):
            keeping.take(one)
    return keeping.book.to_bytes()


class _Keeping:
    """A book that is being added to."""

    def __init__(self, book: Book, rules: Rules) -> None:
        self._rules, self._closed = rules, book.closed
        self._cells = {cell.start_ms: cell for cell in book.cells}
        self._clock_ms, self._heard_ms = book.clock_ms, book.heard_ms

    @property
    def book(self) -> Book:
        """What it came to."""
        cells = tuple(self._cells[start] for start in sorted(self._cells))
        return Book(self._closed, cells, self._clock_ms, self._heard_ms)

    def pass_time(self, at_ms: int) -> None:
        """Close windows up to this moment, but not while the source of values is silent."""
        if at_ms <= self._clock_ms:
            return
        self._clock_ms, ripe_ms = at_ms, at_ms
        if self._rules.silence_ms is not None and self._heard_ms:
            ripe_ms = min(at_ms, self._heard_ms + self._rules.silence_ms)
        end_ms = ripe_ms - self._rules.window_ms - self._rules.cell_ms
        for start_ms in [start for start in self._cells if start <= end_ms]:
            self._closed = _with(self._closed, self._cells.pop(start_ms))

    def take(self, one: Said) -> None:
        """Count an impression bought on a hint, or put its value right."""
        hint, bought = one.body.get("hint"), "amount" not in one.body
        if hint is None:
            return
        if bought:
            start_ms = self._clock_ms - self._clock_ms % self._rules.cell_ms
            cell = self._cells.get(start_ms, Cell(start_ms, 0, 0))
            self._cells[start_ms] = _and(cell, Cell(start_ms, 1, hint))
            self._heard_ms = self._heard_ms or self._clock_ms
            self._keep_few()
            return
        self._heard_ms = self._clock_ms
        if one.counts:
            self._closed = hints.learn(self._closed, hint, one.after)
        else:
            self._closed = hints.correct(self._closed, one.before, one.after)

    def _keep_few(self) -> None:
        # Windows that stand still would else pile up for as long as a source is silent.
        if len(self._cells) > CELLS_MAX:
            oldest, next_start_ms = sorted(self._cells)[:2]
            merged = _and(self._cells[next_start_ms], self._cells.pop(oldest))
            self._cells[next_start_ms] = merged


def _and(cell: Cell, other: Cell) -> Cell:
    impressions = cell.impressions + other.impressions
    return Cell(cell.start_ms, impressions, cell.hinted + other.hinted)


def _with(closed: Hints, cell: Cell) -> Hints:
    impressions = closed.impressions + cell.impressions
    return replace(closed, impressions=impressions, hinted=closed.hinted + cell.hinted)
