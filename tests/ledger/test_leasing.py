"""How large a slice is: quick to bid from, small enough that a crash strands little."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.ledger.leasing import Wish, slice_amount

MUCH = 10**9

amounts = some.integers(0, 10**15)
wishes = some.builds(Wish, largest_bid=some.integers(1, 10**12), forecast=amounts, before=amounts)
workers = some.integers(1, 64)


@pytest.mark.parametrize(
    ("largest", "forecast", "before", "free", "workers", "orphaned", "amount"),
    [
        (10, MUCH, 0, MUCH, 1, 0, 160),  # The first slice: sixteen of the largest bid.
        (10, MUCH, 160, MUCH, 1, 0, 320),  # Each next one at most double.
        (10, MUCH, 10, MUCH, 1, 0, 20),
        (10, 55, 160, MUCH, 1, 0, 55),  # No more than is forecast,
        (10, 3, 160, MUCH, 1, 0, 10),  # but enough for one bid.
        (10, MUCH, 160, 800, 1, 0, 200),  # A quarter of what is free,
        (10, MUCH, 160, 800, 4, 0, 50),  # shared by the workers.
        (10, MUCH, 160, 39, 1, 0, 10),  # The tail: one bid at a time,
        (10, MUCH, 160, 10, 9, 0, 10),
        (10, MUCH, 160, 7, 1, 0, 7),  # then what is left,
        (10, MUCH, 160, 0, 1, 0, 0),  # then nothing.
        (10, MUCH, 160, MUCH, 1, 50, 320),  # Orphans of a twentieth of the budget of 1000
        (10, MUCH, 160, MUCH, 1, 51, 10),  # and more, and only one bid is leased.
        (10, MUCH, 160, 4, 1, 51, 4),
    ],
)
def test_the_size_of_a_slice(
    largest: int, forecast: int, before: int, free: int, workers: int, orphaned: int, amount: int
) -> None:
    """Each rule of the size, at the edge where it begins to bind."""
    wish = Wish(largest, forecast, before)
    assert slice_amount(wish, free, 1000, workers, orphaned) == amount


@given(wishes, amounts, amounts, workers, amounts)
def test_a_slice_is_never_more_than_is_free(
    wish: Wish, free: int, budget: int, workers: int, orphaned: int
) -> None:
    """Whatever is wished for, 0 <= slice <= free, and something when anything is free."""
    amount = slice_amount(wish, free, budget, workers, orphaned)

    assert 0 <= amount <= free
    assert (amount > 0) == (free > 0)


@given(wishes, amounts, workers)
def test_one_worker_cannot_take_it_all(wish: Wish, free: int, workers: int) -> None:
    """Beyond one largest bid a worker gets at most its share of a quarter."""
    amount = slice_amount(wish, free, free, workers, 0)
    assert amount <= max(wish.largest_bid, free // 4 // workers)


@given(some.integers(1, 1000), some.integers(1, 10**9), some.integers(1, 8))
def test_leasing_again_and_again_reaches_the_last_nano(
    largest: int, budget: int, workers: int
) -> None:
    """Slices that grow and shrink leave nothing stranded, and there are not many of them."""
    free, before, taken = budget, 0, 0
    while free:
        before = slice_amount(Wish(largest, 10**18, before), free, budget, workers, 0)
        free, taken = free - before, taken + 1

    assert taken <= 2000
