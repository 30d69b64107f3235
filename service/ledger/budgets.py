"""Raising and lowering a budget under the promise."""

from __future__ import annotations

from service.errors import Conflict
from service.ledger.accounts import Account, Day
from service.money import nanos_text


def set_budget(account: Account, budget: int) -> Account:
    """
    The account after the operator names a new budget in nanos.

    A raised budget first turns unfunded cost into spend. A lowered one is a target
    that the budget follows as holds are released.

    Raises:
        Conflict: Below what is spent.
    """
    if budget < account.spent:
        detail = f"{nanos_text(account.spent)} is spent already; the budget cannot be lower."
        raise Conflict("budget_below_spent", detail, {"spent": nanos_text(account.spent)})
    # Open bids cannot be called back, so their holds are the least that the bound may be.
    bound = max(budget, account.spent + account.held)
    # Late costs that found no money are the oldest debt, so new money goes to them first.
    funded = min(account.unfunded, max(0, budget - account.spent - account.held))
    return account._replace(
        budget=bound,
        target=budget,
        spent=account.spent + funded,
        unfunded=account.unfunded - funded,
    )


def set_day_budget(day: Day, budget: int) -> Day:
    """The day after the operator names a new daily budget in nanos; it never undoes spend."""
    return day._replace(budget=max(budget, day.spent + day.held), target=budget)
