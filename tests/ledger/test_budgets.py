"""Raising and lowering a budget under the promise."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.errors import Conflict
from service.ledger.accounts import Account, Day
from service.ledger.budgets import set_budget, set_day_budget

amounts = some.integers(0, 1000)


def account(spent: int, held: int, unfunded: int = 0, budget: int = 100) -> Account:
    """A balance under a budget of 100 nanos."""
    return Account("x", budget, budget, spent, held, unfunded, 0, 0, 0)


@pytest.mark.parametrize(
    ("before", "budget", "bound", "spent", "unfunded"),
    [
        (account(30, 20), 200, 200, 30, 0),
        (account(30, 20), 60, 60, 30, 0),
        (account(30, 20), 50, 50, 30, 0),
        (account(30, 20), 49, 50, 30, 0),  # A target: leases stop, the budget follows.
        (account(30, 20), 30, 50, 30, 0),
        (account(60, 40, 25), 110, 110, 70, 15),  # Unfunded cost comes first.
        (account(60, 40, 25), 125, 125, 85, 0),
        (account(60, 40, 25), 500, 500, 85, 0),
        (account(60, 30, 25), 95, 95, 65, 20),
        (account(0, 0), 0, 0, 0, 0),
    ],
)
def test_a_new_budget(before: Account, budget: int, bound: int, spent: int, unfunded: int) -> None:
    """Each edit gives the budget, the spend and the unfunded rest it should."""
    after = set_budget(before, budget)

    assert (after.budget, after.target) == (bound, budget)
    assert (after.spent, after.unfunded) == (spent, unfunded)
    assert after.held == before.held


def test_a_budget_below_what_is_spent_is_refused_with_the_number() -> None:
    """Money that is gone cannot be un-spent by an edit."""
    with pytest.raises(Conflict) as refused:
        set_budget(account(2_500_000_000, 0, budget=10**10), 2_499_999_999)

    assert refused.value.code == "budget_below_spent"
    assert refused.value.data == {"spent": "2.50"}


@given(amounts, amounts, amounts, amounts)
def test_an_edit_keeps_the_promise_and_every_cost(
    spent: int, held: int, unfunded: int, budget: int
) -> None:
    """After any edit spent + held <= budget, and nothing that was charged is lost."""
    before = Account("x", spent + held, spent + held, spent, held, unfunded, 0, 0, 0)
    after = set_budget(before, spent + budget)

    assert after.spent + after.held <= after.budget
    assert after.spent + after.unfunded == before.spent + before.unfunded
    assert after.budget == max(after.target, after.spent + after.held)


@pytest.mark.parametrize(("budget", "bound"), [(200, 200), (50, 50), (49, 50), (0, 50)])
def test_a_new_daily_budget_never_undoes_spend(budget: int, bound: int) -> None:
    """A day lowered below what it has spent and held only stops leasing."""
    after = set_day_budget(Day("x", "2026-12-01", 100, 100, 30, 20, 5), budget)

    assert (after.budget, after.target) == (bound, budget)
    assert (after.spent, after.held, after.over_spent) == (30, 20, 5)
    assert after.free == max(0, budget - 55)
