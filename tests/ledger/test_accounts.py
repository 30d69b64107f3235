"""Money rows as values: movements add, and what is free never counts money twice."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.ledger.accounts import NOTHING, Account, Day, Movement, Slice

movements = some.builds(Movement, *[some.integers(-100, 100) for _ in Movement._fields])


def account(budget: int, target: int, spent: int, held: int) -> Account:
    """A balance with nothing unfunded or disputed."""
    return Account("x", budget, target, spent, held, 0, 0, 0, 0)


@given(movements, movements)
def test_movements_add_field_by_field(one: Movement, two: Movement) -> None:
    """The sum moves every row as both would, one after the other, and nothing moves nothing."""
    start = account(10**6, 10**6, 1000, 1000)

    assert start.moved(one + two) == start.moved(one).moved(two)
    assert one + NOTHING == one
    assert (one + two).cost == one.cost + two.cost


def test_a_cost_is_all_that_was_charged() -> None:
    """Spent, unfunded and disputed are the three places a clearing price can go."""
    assert Movement(spent=1, held=2, unfunded=4, disputed=8, remaining=16, owed=32).cost == 13


@pytest.mark.parametrize(
    ("row", "free"),
    [
        (account(100, 100, 30, 20), 50),
        (account(100, 100, 30, 70), 0),
        (account(60, 40, 30, 30), 0),  # Lowered: what is above the target is not free.
        (account(60, 80, 0, 0), 80),
    ],
)
def test_what_is_free_to_lease(row: Account, free: int) -> None:
    """The target counts, not the budget that falls towards it."""
    assert row.free == free


@given(some.integers(0, 100), some.integers(0, 100), some.integers(0, 100), some.integers(0, 100))
def test_a_lowered_budget_follows_its_holds_down(
    spent: int, held: int, released: int, target: int
) -> None:
    """It is the target once there, and never below what is spent and held."""
    released = min(released, held)
    before = account(max(target, spent + held), target, spent, held)
    after = before.moved(Movement(held=-released))

    assert after.budget == max(target, spent + held - released)


def test_late_costs_of_a_day_count_against_its_leases() -> None:
    """What passed the day's own limit is taken out of what the day may still lease."""
    day = Day("x", "2026-12-01", 100, 100, 60, 10, 25)

    assert (day.free, day.room) == (5, 30)
    assert day.moved(Movement(day_over_spent=10)).free == 0


def test_a_lowered_day_follows_its_holds_down() -> None:
    """A day keeps spent + held within its budget while it falls to its target."""
    day = Day("x", "2026-12-01", 70, 50, 40, 30, 0)

    assert day.moved(Movement(held=-10, day_spent=4, spent=4)).budget == 64
    assert day.moved(Movement(held=-30)).budget == 50


@pytest.mark.parametrize(("state", "alive"), [("open", True), ("retired", True), ("closed", False)])
def test_a_hold_lives_until_its_slice_is_closed(state: str, alive: bool) -> None:
    """Retiring frees what was never issued and leaves the holds of bids alone."""
    assert Slice(b"s", "x", "w", "2026-12-01", 9, 9, 0, 0, 0, state).alive is alive
