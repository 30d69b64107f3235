"""Costs that come when their hold is gone: the one rule for money nobody set aside."""

from __future__ import annotations

from service.ledger.accounts import Account, Day, Movement


def late_cost(account: Account, day: Day | None, cost: int) -> Movement:
    """
    Book `cost` nanos from free money, or as unfunded when there is not enough.

    The budget is never passed; what the day cannot take goes to its `over_spent`.
    """
    if account.budget - account.spent - account.held < cost:
        return Movement(unfunded=cost)
    # A day is a plan, the budget is a promise: the day never refuses what the budget can pay.
    inside = cost if day is None else min(cost, day.room)
    return Movement(spent=cost, day_spent=inside, day_over_spent=cost - inside)
