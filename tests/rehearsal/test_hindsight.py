"""The best fixed bid against trying every bid one after the other."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal.hindsight import FixedBid, best_fixed_bid, surplus_of

opportunities = some.lists(some.tuples(some.integers(0, 12), some.integers(0, 20)), max_size=30)
limits = some.none() | some.integers(0, 40)


def earned(rows: list[tuple[int, int]], bid: int, budget: int | None) -> int:
    """What one bid earns, one opportunity after the other, until a price is not there."""
    spent = surplus = 0
    for competing, value in rows:
        if competing <= bid:
            if budget is not None and spent + competing > budget:
                break
            spent += competing
            surplus += value - competing
    return surplus


@given(opportunities, limits, limits)
def test_no_bid_earns_more(
    rows: list[tuple[int, int]], cap: int | None, budget: int | None
) -> None:
    """It earns what it says, and no whole bid from 0 to the cap earns more."""
    rivals, values = [row[0] for row in rows], [row[1] for row in rows]
    best = best_fixed_bid(rivals, values, cap=cap, budget=budget)
    highest = 12 if cap is None else min(cap, 12)
    every = [earned(rows, bid, budget) for bid in range(highest + 1)]

    assert best.surplus == max([0, *every])
    assert best.surplus == earned(rows, best.bid, budget) or best == FixedBid(0, 0)


@given(opportunities, some.integers(0, 12))
def test_the_surplus_of_one_bid(rows: list[tuple[int, int]], bid: int) -> None:
    """A sum over the opportunities it would win, a tie included."""
    rivals, values = [row[0] for row in rows], [row[1] for row in rows]

    assert surplus_of(rivals, values, bid) == earned(rows, bid, None)


def test_a_case_by_hand() -> None:
    """Bids 1, 2, 3 earn 4 - 1 = 3, 3 + 0 - 2 = 1 and 1 + 9 - 3 = 7; the tie at 3 is won whole."""
    assert best_fixed_bid([3, 1, 2, 3], [9, 4, 0, 3]) == FixedBid(3, 7)


def test_a_budget_ends_the_bidding() -> None:
    """With money for one win, the dear bid buys the first only: 9 - 3; the cheap one 4 - 1."""
    assert best_fixed_bid([3, 1, 2, 3], [9, 4, 0, 3], budget=3) == FixedBid(3, 6)


def test_nothing_worth_buying_is_bid_zero() -> None:
    """Where every bid loses, not bidding is best; so it is where nothing is for sale."""
    assert best_fixed_bid([3, 4], [1, 1]) == FixedBid(0, 0)
    assert best_fixed_bid([], []) == FixedBid(0, 0)
