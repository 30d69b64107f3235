"""How large a slice may be: big enough to bid quickly, small enough that a crash strands little."""

from __future__ import annotations

from dataclasses import dataclass

# A worker that keeps crashing strands its first slice each time, so that one stays small.
FIRST_BIDS_MAX = 16
GROWTH_MAX = 2
# A share, so that slices shrink as the budget ends and no worker holds its tail alone.
SHARE_OF_FREE = 4
ORPHANED_SHARE_MAX = 20  # One twentieth of the budget in slices of dead workers trips the breaker.


@dataclass(frozen=True, slots=True)
class Wish:
    """
    What a worker asks for; amounts in nanos.

    Args:
        largest_bid: The bid cap per impression.
        forecast: What it will commit until two refreshes from now.
        before: The amount of its last slice, or 0 for the first.
    """

    largest_bid: int
    forecast: int
    before: int


def slice_amount(wish: Wish, free: int, budget: int, workers: int, orphaned: int) -> int:
    """
    The amount to lease in nanos; 0 when nothing is free.

    Args:
        free: Money neither spent nor held, of the line item and of the day.
        budget: The line item's budget.
        workers: How many workers are live, at least 1.
        orphaned: Money in slices of workers that are gone.
    """
    # In a crash loop every start would strand another slice; one bid at a time strands little.
    if orphaned * ORPHANED_SHARE_MAX > budget:
        return min(free, wish.largest_bid)
    grown = GROWTH_MAX * wish.before if wish.before else FIRST_BIDS_MAX * wish.largest_bid
    wanted = min(max(wish.forecast, wish.largest_bid), free // SHARE_OF_FREE // workers, grown)
    # Less than one largest bid is still worth leasing: it spends the tail of the budget.
    return min(free, max(wish.largest_bid, wanted))
