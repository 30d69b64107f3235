"""Money that people with authority correct: refunds, and spend that a restore forgot; pure."""

from __future__ import annotations

from service.errors import Conflict
from service.ledger.accounts import Account, Day, Movement
from service.money import nanos_text


def reversal(account: Account, day: Day | None, amount: int) -> Movement:
    """
    Take a refunded clearing price back, in nanos; what found no money before goes first.

    Args:
        day: The local day on which it was spent, when that is known.

    Raises:
        Conflict: More than was spent.
    """
    if amount > account.spent + account.unfunded:
        detail = f"{nanos_text(account.spent)} is spent; no more can be taken back."
        raise Conflict("reversal_above_spent", detail, {"spent": nanos_text(account.spent)})
    unfunded = min(amount, account.unfunded)
    spent = amount - unfunded
    over = min(spent, day.over_spent) if day else 0
    inside = min(spent - over, day.spent) if day else 0
    return Movement(spent=-spent, unfunded=-unfunded, day_spent=-inside, day_over_spent=-over)


def reconciled(account: Account, spent: int) -> Movement:
    """
    Book what a restored database does not know of, never above the budget.

    Args:
        spent: What was spent in all by the books of those who were paid, in nanos.

    Raises:
        Conflict: Less than is booked already; that would be a refund.
    """
    booked = account.spent + account.unfunded
    if spent < booked:
        detail = f"{nanos_text(booked)} is booked already; take back a refund by a reversal."
        raise Conflict("below_booked", detail, {"booked": nanos_text(booked)})
    missing = spent - booked
    inside = min(missing, max(0, account.budget - account.spent - account.held))
    return Movement(spent=inside, unfunded=missing - inside)
