"""What a policy did in a rehearsal, auction by auction, as columns that figures are made of."""

from __future__ import annotations

from array import array
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

Nanos = NDArray[np.int64]
Flags = NDArray[np.bool_]

PASSED = -1  # In place of a bid.


class Sold(Protocol):
    """What is read off an auction here."""

    @property
    def least(self) -> int: ...

    @property
    def value(self) -> int | None: ...

    @property
    def worth(self) -> int: ...

    @property
    def told(self) -> bool: ...


@dataclass(frozen=True, slots=True)
class Columns:
    """
    One number per auction; money in nanos.

    Args:
        least: The least bid that won.
        value: What it brought or would have brought.
        worth: What it counts for.
        bid: The bid; `PASSED` for none.
        paid: Its cost, fees included; 0 where it did not win.
        won: Whether it won.
        unknown: Whether nobody can say if it won.
        valued: Whether anybody knows its value.
        told: Whether `least` is known and not only bounded.
    """

    least: Nanos
    value: Nanos
    worth: Nanos
    bid: Nanos
    paid: Nanos
    won: Flags
    unknown: Flags
    valued: Flags
    told: Flags


class Taken:
    """The columns while they grow; eight bytes a number, so that long replays fit."""

    def __init__(self) -> None:
        # Lists of Python numbers would take several times the memory of a long replay.
        self._money = [array("q") for _ in range(5)]
        self._flags = [bytearray() for _ in range(4)]
        self.untold, self.untold_paid = 0, 0

    def add(self, auction: Sold, bid: int, paid: int, won: bool, unknown: bool) -> None:
        """Note one auction."""
        # An unknown value stands as 0, and only its flag says that nobody knows it.
        money = (auction.least, auction.value or 0, auction.worth, bid, paid)
        for column, number in zip(self._money, money, strict=True):
            column.append(number)
        said = (won, unknown, auction.value is not None, auction.told)
        for flags, flag in zip(self._flags, said, strict=True):
            flags.append(flag)

    def never_told(self, paid: int | None) -> None:
        """Note an outcome that nobody reports; a win among them costs money nobody books."""
        self.untold += 1
        self.untold_paid += paid or 0

    @property
    def columns(self) -> Columns:
        """What it has come to so far."""
        # Copies, since an array that is looked at could not grow any more.
        least, value, worth, bid, paid = (np.array(one, dtype=np.int64) for one in self._money)
        won, unknown, valued, told = (np.array(one, dtype=np.bool_) for one in self._flags)
        return Columns(least, value, worth, bid, paid, won, unknown, valued, told)
