"""Costs whose hold is gone: from free money if it is there, else visible as unfunded."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as some

from service.ledger.accounts import Account, Day
from service.ledger.late import late_cost

amounts = some.integers(0, 1000)


@given(amounts, amounts, amounts, amounts)
def test_a_late_cost_never_passes_the_budget_and_never_vanishes(
    budget: int, spent: int, held: int, cost: int
) -> None:
    """It is booked whole, spent when it fits to the nano and unfunded when it does not."""
    budget = max(budget, spent + held)
    account = Account("x", budget, budget, spent, held, 0, 0, 0, 0)
    moved = late_cost(account, None, cost)

    assert moved.cost == cost
    assert bool(moved.unfunded) == (bool(cost) and spent + held + cost > budget)
    assert account.moved(moved).spent + held <= budget


@given(amounts, amounts, amounts, amounts)
def test_a_day_takes_what_it_can_and_the_rest_is_beyond_it(
    budget: int, spent: int, held: int, cost: int
) -> None:
    """The day's own limit holds too; what passes it is counted beside."""
    budget = max(budget, spent + held)
    day = Day("x", "2026-12-01", budget, budget, spent, held, 0)
    moved = late_cost(Account("x", 10**6, 10**6, 0, 0, 0, 0, 0, 0), day, cost)

    assert moved.day_spent + moved.day_over_spent == moved.spent == cost
    assert moved.day_spent == min(cost, budget - spent - held)


def test_an_unfunded_cost_leaves_the_day_alone() -> None:
    """Money that was not there was not spent on any day."""
    day = Day("x", "2026-12-01", 50, 50, 0, 0, 0)
    moved = late_cost(Account("x", 5, 5, 0, 0, 0, 0, 0, 0), day, 6)

    assert (moved.unfunded, moved.day_spent, moved.day_over_spent) == (6, 0, 0)
