"""What a line item has counted, as integer sums, apart from how entries become sums."""

from __future__ import annotations

from dataclasses import dataclass, fields


@dataclass(frozen=True, slots=True)
class Tally:
    """
    Sums over the entries of a stream since the last reset; money in nanos.

    Integers only, so the sums are equal in any order and from any process. A sum over part
    of a stream may be negative, because a correction can stand in another part.

    Args:
        rounds: Opportunities priced that are known to be over, passes under the floor included.
        under_floor: Those of the rounds that passed under the floor.
        wins: Impressions bought.
        late: Those of the wins that were reported after their grace.
        losses: Bids beaten on price.
        voids: Bids that failed for other reasons and teach nothing.
        paid: Sum of prices paid.
        known: Impressions whose value is known: told once, or with a window that has closed.
        converted: Known wins worth more than nothing.
        amount: Sum of known values, each cut at the ceiling.
        amount_square: Sum of their squares, in square nanos.
        clipped: Known values that were cut at the ceiling.
        values_seen: Value reports, corrections not counted.
    """

    rounds: int = 0
    under_floor: int = 0
    wins: int = 0
    late: int = 0
    losses: int = 0
    voids: int = 0
    paid: int = 0
    known: int = 0
    converted: int = 0
    amount: int = 0
    amount_square: int = 0
    clipped: int = 0
    values_seen: int = 0


NAMES = tuple(field.name for field in fields(Tally))
