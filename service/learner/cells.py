"""Impressions kept by age while a memory is added to, apart from what a lesson says of them.

Cells whose windows have closed are taken into the sums of the long ago, or, where a line item
forgets, kept and thinned until they are too old to count.
"""

from __future__ import annotations

from bisect import bisect_right
from operator import attrgetter

from service.learner.change import UNITS_PER_NAT
from service.learner.memory import Cell, Memory
from service.learner.rules import ACCRUES, KEPT, Drift, Rules
from service.learner.watch import Watch, step

KEPT_PIECE = KEPT // 8  # What is kept beyond the horizon lies in at most some sixteen cells.


_OF_CELL = attrgetter(*Cell.__slots__)


class Sums:
    """A cell that is being added to; the arguments are those of `Cell`."""

    __slots__ = Cell.__slots__

    start_ms: int
    rounds: int
    bought: int
    known: int
    converted: int
    amount: int
    amount_square: int

    def __init__(self, cell: Cell) -> None:
        # Written out, since every cell is opened and closed again for every lesson.
        self.start_ms, self.rounds = cell.start_ms, cell.rounds
        self.bought, self.known, self.converted = cell.bought, cell.known, cell.converted
        self.amount, self.amount_square = cell.amount, cell.amount_square

    def cell(self) -> Cell:
        """The cell it has become."""
        return Cell(*_OF_CELL(self))

    def add(self, other: Sums) -> None:
        """Take in a later cell."""
        # All but the start, which stays that of the earlier cell.
        for name in Cell.__slots__[1:]:
            setattr(self, name, getattr(self, name) + getattr(other, name))

    def put(self, before: int, after: int) -> None:
        """Count an impression at what it has brought, in place of what it had brought before."""
        self.converted += (after > 0) - (before > 0)
        self.amount += after - before
        self.amount_square += after * after - before * before


class Cells:
    """The cells of one memory, its long ago, and the detector that reads cells as they close."""

    def __init__(self, memory: Memory, rules: Rules) -> None:
        base = memory.base
        self._rules = rules
        self._open = [Sums(cell) for cell in memory.cells]
        # Of the cells, or more: what a restart took along is still in it until next counted.
        self._rounds = sum(cell.rounds for cell in memory.cells)
        self._closed = memory.closed
        self.long_ago = Sums(
            Cell(0, 0, 0, base.known, base.converted, base.amount, base.amount_square)
        )
        self.clock_ms, self.began_ms = memory.clock_ms, memory.began_ms
        self.watch = memory.watch

    @property
    def state(self) -> tuple[tuple[Cell, ...], int]:
        """The cells, and how many of them are closed."""
        return tuple(cell.cell() for cell in self._open), self._closed

    def newest(self) -> Sums:
        """The cell of this moment."""
        if not self._open:
            self._open.append(Sums(Cell(self.clock_ms)))
        return self._open[-1]

    def played(self, rounds: int) -> None:
        """Count rounds of this moment."""
        self.newest().rounds += rounds
        self._rounds += rounds

    def of(self, won_ms: int) -> Sums:
        """The cell of an impression bought at that moment."""
        if won_ms >= self.clock_ms:
            return self.newest()
        at = bisect_right(self._open, won_ms, key=lambda cell: cell.start_ms)
        # Older than every cell: its values go where the impression itself has gone.
        return self._open[at - 1] if at else self.long_ago

    def is_closed(self, won_ms: int) -> bool:
        """Whether the window of an impression bought at that moment has closed."""
        still_open = self._open[self._closed :]
        return not still_open or won_ms < still_open[0].start_ms

    def clear(self) -> None:
        """Forget all."""
        self._open, self._closed, self.watch = [], 0, Watch()
        self.long_ago = Sums(Cell(0))

    def pass_time(self, at_ms: int, ripe_ms: int) -> None:
        """
        Move to a later moment and close the windows that are over.

        Args:
            at_ms: Service time now.
            ripe_ms: The moment as far as windows are concerned; earlier while values fail to come.
        """
        self.clock_ms = at_ms
        until_ms = ripe_ms - self._rules.window_ms
        while self._closed < len(self._open) and self._end_ms(self._closed) <= until_ms:
            self._close(self._closed)
        self._forget()
        # Decided once a moment, so that one moment's lessons share a cell in any order.
        if not self._open or self._over(self._open[-1]):
            self._open.append(Sums(Cell(self.clock_ms)))

    def _over(self, cell: Sums) -> bool:
        drift = self._rules.drift
        full = drift is not None and drift.by == "rounds" and cell.rounds >= drift.piece
        return full or self.clock_ms - cell.start_ms >= self._rules.cell_ms

    def _end_ms(self, at: int) -> int:
        by_length = self._open[at].start_ms + self._rules.cell_ms
        return (
            min(by_length, self._open[at + 1].start_ms) if at + 1 < len(self._open) else by_length
        )

    def _close(self, at: int) -> None:
        cell, drift = self._open[at], self._rules.drift
        if self._rules.arrival == ACCRUES:
            # After its window an impression is known, and without a value it was worth nothing.
            cell.known = cell.bought
        if self._rules.ratio is not None and self._changed(cell):
            # A restart has cut the list of cells, so another cell stands at this place now.
            return
        if drift is None:
            self.long_ago.add(self._open.pop(at))
        elif at and self._fit(self._open[at - 1], cell):
            self._open[at - 1].add(self._open.pop(at))
        else:
            self._closed += 1

    def _fit(self, one: Sums, two: Sums) -> bool:
        """Whether two closed cells together still tell age finely enough."""
        drift = self._rules.drift
        if drift is None or drift.by == "rounds":
            return drift is not None and one.rounds + two.rounds <= drift.piece
        return two.start_ms + self._rules.cell_ms - one.start_ms <= drift.piece

    def _forget(self) -> None:
        """
        Put closed cells beyond the horizon with the long ago, which no longer counts.

        The newest that are known stay apart however old they are, in coarser cells.
        """
        drift = self._rules.drift
        if drift is None or not self._closed or not self._any_beyond(drift):
            return
        beyond = sum(age > drift.horizon for age in self._ages()[: self._closed])
        newer = sum(cell.known for cell in self._open)
        gone = 0
        while gone < beyond and newer - self._open[gone].known >= KEPT:
            newer -= self._open[gone].known
            self.long_ago.add(self._open[gone])
            gone += 1
        del self._open[:gone]
        self._closed -= gone
        self._thin(beyond - gone)
        self._rounds = sum(cell.rounds for cell in self._open)

    def _any_beyond(self, drift: Drift) -> bool:
        """Whether the oldest cell may be; asked at every moment, so without looking at all."""
        if drift.by == "rounds":
            return self._rounds - self._open[0].rounds > drift.horizon
        return self.clock_ms - self._end_ms(0) > drift.horizon

    def _thin(self, beyond: int) -> None:
        """Join neighbours among so many of the oldest cells, as far as they hold little."""
        at = 1
        while at < beyond:
            if self._open[at - 1].known + self._open[at].known > KEPT_PIECE:
                at += 1
                continue
            self._open[at - 1].add(self._open.pop(at))
            self._closed, beyond = self._closed - 1, beyond - 1

    def _ages(self) -> list[int]:
        """How long ago each cell ended, in rounds or milliseconds, oldest first."""
        drift, ages, rounds = self._rules.drift, list[int](), 0
        for at in range(len(self._open) - 1, -1, -1):
            by_time = self.clock_ms - self._end_ms(at)
            ages.append(rounds if drift is not None and drift.by == "rounds" else by_time)
            rounds += self._open[at].rounds
        return ages[::-1]

    def _changed(self, cell: Sums) -> bool:
        """Step the detector; on an alarm that restarts, forget what came before the change."""
        rules, alarms = self._rules, self.watch.alarms
        # Rare values are counted, or a single large one would sound the alarm.
        hits = cell.converted if rules.rare else cell.amount / rules.ceiling
        self.watch = step(
            self.watch, cell.known, round(hits * UNITS_PER_NAT), cell.start_ms, rules.ratio or 1.0,
            rules.alarm,
        )  # fmt: skip
        if self.watch.alarms == alarms or not rules.restarts:
            return False
        self.long_ago = Sums(Cell(0))
        before = sum(cell.start_ms < self.watch.changed_ms for cell in self._open)
        self._open, self._closed = self._open[before:], max(0, self._closed - before)
        # What the long ago held from after the change is lost with it, corrections too.
        self.began_ms = self._open[0].start_ms
        return True
