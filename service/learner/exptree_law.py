"""The chances bids are drawn with during one epoch, frozen as whole numbers, apart from learning.

A ticket names its epoch. When its outcome comes, the chance that a bid of that epoch beats
the price is read here and written beside the outcome, so folding never needs a law again.
"""

from __future__ import annotations

import struct
from bisect import bisect_right
from dataclasses import dataclass, field
from itertools import accumulate, pairwise

from numpy.random import Generator

from service.learner.exptree_bounds import UNITS
from service.learner.exptree_rules import DOUBLINGS_MAX, Stage
from service.learner.partition import BadTicks, Ticks
from service.learner.sealed import sealed, unsealed

FORM = 1

# name, form, top, tick, stage, forced, number of runs
_HEAD = struct.Struct(">3sBQQBBQH")
_RUN = struct.Struct(">HQ")
_TOTAL_MAX = 2 * UNITS  # All masses together are near one; more could not be drawn from.
_NAME = b"xpl"


class UnreadableLaw(ValueError):
    """The bytes are not a law of the form we write."""


@dataclass(frozen=True, slots=True)
class Law:
    """
    How likely each bid is: every cell has a whole mass, its bids share it, the top has one too.

    Args:
        ticks: The bids to choose from.
        stage: The stage of learning it belongs to.
        forced: Mass of the top, bid whatever was learnt.
        ends: Where runs of cells of one mass end, in cells, ascending up to all of them.
        masses: Mass of each cell of a run, at least 1.

    Raises:
        UnreadableLaw: The runs or masses are not as said.
    """

    ticks: Ticks
    stage: Stage
    forced: int
    ends: tuple[int, ...]
    masses: tuple[int, ...]
    _below: tuple[int, ...] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        starts = (0, *self.ends)
        rising = all(left < right for left, right in pairwise(starts))
        if not rising or starts[-1] != self.ticks.cells or len(self.ends) != len(self.masses):
            raise UnreadableLaw("the runs do not cover the cells")
        if self.forced < 0 or any(mass < 1 for mass in self.masses):
            raise UnreadableLaw("a mass is missing")
        widths = (right - left for left, right in pairwise(starts))
        runs = (width * mass for width, mass in zip(widths, self.masses, strict=True))
        object.__setattr__(self, "_below", tuple(accumulate(runs, initial=0)))
        if self.total > _TOTAL_MAX:
            raise UnreadableLaw("there is more mass than one")

    @property
    def total(self) -> int:
        """All mass there is."""
        return self._below[-1] + self.forced

    def draw(self, rng: Generator) -> int:
        """A bid in nanos: the top, or a whole number strictly between two ticks."""
        at = int(rng.integers(self.total))
        if at >= self._below[-1]:
            return self.ticks.top
        start, end = self.ticks.edges(self._cell(at))
        return int(rng.integers(start + 1, end))

    def chance_above(self, price: int, floor: int = 0) -> float:
        """
        The chance that a bid is above a price; of those bids that reach the floor, if given.

        Rounded once from whole numbers, so it is the same on any machine. 0 from the top on.

        Args:
            price: In nanos; one below the floor is beaten by all that left.
            floor: The least bid that left, in nanos.
        """
        # Whatever left was at least the floor, and so above the nano below it.
        above, parts = self._above(max(price, floor - 1, 0))
        reaching, of = self._above(floor - 1) if floor > 0 else (self.total, 1)
        return above * of / (parts * reaching) if reaching else 0.0

    def chance_of(self, bid: int) -> float:
        """The chance that exactly this bid is drawn; 0 of what never is."""
        if bid == self.ticks.top:
            return self.forced / self.total
        if not 0 < bid < self.ticks.top:
            return 0.0
        cell, _, _ = self.ticks.place(bid)
        start, end = self.ticks.edges(cell)
        if not start < bid < end:
            return 0.0
        return self.masses[bisect_right(self.ends, cell)] / (self.total * (end - start - 1))

    def quantile(self, order: float) -> int:
        """The bid in nanos, up to one tick, that a share `order` of all bids stays under."""
        at = min(int(order * self.total), self.total - 1)
        if at >= self._below[-1]:
            return self.ticks.top
        return self.ticks.edges(self._cell(at))[1]

    def to_bytes(self) -> bytes:
        """Equal laws give equal bytes; at most 10 for each run of cells and 36 more."""
        head = _HEAD.pack(
            *(_NAME, FORM, self.ticks.top, self.ticks.tick),
            *(*self.stage, self.forced, len(self.ends)),
        )
        runs = (_RUN.pack(*run) for run in zip(self.ends, self.masses, strict=True))
        return sealed(head + b"".join(runs))

    @staticmethod
    def from_bytes(state: bytes) -> Law:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadableLaw: Another form, or not whole.
        """
        body = _checked(state)
        _, _, top, tick, by_rounds, by_width, forced, runs = _HEAD.unpack_from(body)
        if len(body) != _HEAD.size + runs * _RUN.size or max(by_rounds, by_width) > DOUBLINGS_MAX:
            raise UnreadableLaw("not whole")
        read = [_RUN.unpack_from(body, _HEAD.size + run * _RUN.size) for run in range(runs)]
        ends, masses = tuple(end for end, _ in read), tuple(mass for _, mass in read)
        try:
            ticks = Ticks(top, tick)
        except BadTicks as error:
            raise UnreadableLaw("no such ticks") from error
        return Law(ticks, (by_rounds, by_width), forced, ends, masses)

    def _cell(self, at: int) -> int:
        # The cell that holds the unit of mass at this place, counted from below.
        run = bisect_right(self._below, at) - 1
        return self._start(run) + (at - self._below[run]) // self.masses[run]

    def _start(self, run: int) -> int:
        return self.ends[run - 1] if run else 0

    def _above(self, price: int) -> tuple[int, int]:
        # The mass above a price as a whole number of parts of a unit, and how many make one.
        if price >= self.ticks.top:
            return 0, 1
        cell, above, bids = self.ticks.place(price)
        run = bisect_right(self.ends, cell)
        beyond = self.total - self._below[run] - (cell + 1 - self._start(run)) * self.masses[run]
        return beyond * bids + self.masses[run] * above, bids


def _checked(state: bytes) -> bytes:
    body, sound = unsealed(state)
    if len(body) < _HEAD.size or body[:3] != _NAME or body[3] != FORM:
        raise UnreadableLaw("not the form of law this release writes")
    if not sound:
        raise UnreadableLaw("damaged")
    return body
