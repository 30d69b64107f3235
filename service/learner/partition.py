"""The range of bids cut at price ticks, apart from what is learnt about any part of it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from itertools import count, pairwise

CELLS_MAX = 2**16 - 1  # A tick is written in two bytes.
CELLS_FITTING = 2048  # With all of them visited a state stays under 64 KiB.


class BadTicks(ValueError):
    """No bid fits strictly between such ticks, or there are too many of them."""


@dataclass(frozen=True, slots=True)
class Ticks:
    """
    The bids (0, top] in cells of one tick each; the last takes what is left, below two ticks.

    A bid is a whole number of nanos strictly inside a cell, or the top itself, so a price on
    a tick never ties with one. A price off the ticks lies inside a cell, and only a share of
    that cell's bids beats it.

    Args:
        top: Largest bid in nanos, the cap.
        tick: Step of prices in nanos, at least 2.

    Raises:
        BadTicks: See there.
    """

    top: int
    tick: int

    def __post_init__(self) -> None:
        if self.tick < 2 or not 1 <= self.cells <= CELLS_MAX:
            raise BadTicks(f"no cells of {self.tick} nanos below {self.top} nanos")

    @staticmethod
    def fitting(top: int) -> Ticks:
        """
        The finest ticks of 1, 2 or 5 times a power of ten that give at most 2,048 cells.

        Raises:
            BadTicks: The top is below 2 nanos.
        """
        ticks = (step * 10**power for power in count() for step in (1, 2, 5))
        return Ticks(top, next(tick for tick in ticks if tick > 1 and top // tick <= CELLS_FITTING))

    @property
    def cells(self) -> int:
        """Number of cells."""
        return self.top // self.tick

    def edges(self, cell: int) -> tuple[int, int]:
        """Where a cell begins and ends, in nanos; its bids lie strictly between."""
        end = self.top if cell == self.cells - 1 else (cell + 1) * self.tick
        return cell * self.tick, end

    def place(self, price: int) -> tuple[int, int, int]:
        """
        Where a price from 0 to below the top lies: its cell, and how many of how many bids
        of that cell are above it. All of them are when the price is a tick.
        """
        cell = min(price // self.tick, self.cells - 1)
        start, end = self.edges(cell)
        return cell, end - 1 - price, end - 1 - start

    def cuts(self, price: int) -> tuple[int, ...]:
        """The ticks at which a price cuts the range: itself, or both edges of its cell."""
        cell, above, bids = self.place(price)
        edges = (cell,) if above == bids else (cell, cell + 1)
        return tuple(edge for edge in edges if 0 < edge < self.cells)


def narrowest(cuts: Iterable[int], cells: int) -> int:
    """The least number of cells between neighbouring cuts, given in ascending order."""
    return min(right - left for left, right in pairwise([0, *cuts, cells]))
